#!/usr/bin/python3
"""Makes the invented recordings of data/demo, always the same ones.

Four cells of an animal that does not exist, see README.md. Three obey the escape-noise model that
softsill fits, so that their true parameters are known (truth.csv); the fourth is a conductance-based
neuron and does not. Needs nothing but Python 3 and numpy. Usage: make_demo.py [DIRECTORY]

Units: ms, mV, nA, MOhm, 1/ms.
"""

import gzip
import math
import os
import sys

import numpy

SEED = 20260117
STEP = 0.1  # ms, of the simulation; what is recorded may be every second step


class Sums:
    """A sum of exponentials, amplitudes a and time constants tau in ms."""

    def __init__(self, *terms):
        self.terms = terms

    def integral(self):
        return sum(a * tau for a, tau in self.terms)


CELLS = {
    # Regular: two-exponential afterhyperpolarisation, threshold that adapts over 10 and 100 ms.
    "n03": dict(
        seconds=50, every=1, repeats=9, repeat_seconds=5, voltage=True,
        mean=0.13, sd=0.13, noise_sd=0.40, noise_ms=2.0,
        kappa=Sums((6.0, 14.0), (4.0, 2.0)), eta=Sums((-7.0, 9.0), (-1.6, 80.0)),
        theta_1=Sums((5.0, 10.0), (1.8, 100.0)),
        resting=-65.5, threshold=-48.5, noise_level=1.2, refractory=2.5),
    # Spike times only: the electrode's balance was lost, so no potential was kept.
    "n07": dict(
        seconds=60, every=2, repeats=9, repeat_seconds=4, voltage=False,
        mean=0.05, sd=0.065, noise_sd=0.0, noise_ms=2.0,
        kappa=Sums((10.5, 20.0)), eta=Sums((-6.0, 14.0), (-1.2, 120.0)),
        theta_1=Sums((3.0, 10.0), (1.2, 100.0)),
        resting=-70.0, threshold=-54.0, noise_level=0.9, refractory=2.0),
    # Bursting: after a spike eta first falls, then lifts the potential for some ms.
    "n11": dict(
        seconds=45, every=2, repeats=8, repeat_seconds=4, voltage=True,
        mean=0.09, sd=0.11, noise_sd=0.35, noise_ms=1.5,
        kappa=Sums((7.0, 16.0)), eta=Sums((26.0, 8.0), (-34.0, 3.0), (-3.2, 90.0)),
        theta_1=Sums((2.0, 10.0), (2.0, 100.0)),
        resting=-68.0, threshold=-50.0, noise_level=1.5, refractory=2.0),
}

# Outside the model class: Wang & Buzsaki 1996, J. Neurosci. 16:6402 (equations and constants from
# memory), membrane of 1e-4 cm^2 so that 1 nA is 10 uA/cm^2, with a private noise current.
CONDUCTANCE = dict(
    seconds=40, every=2, repeats=8, repeat_seconds=4, mean=-0.01, sd=0.10, noise_sd=0.30,
    noise_ms=2.0, private_sd=0.02)


def fluctuating_current(rng, steps, step, mean, sd, correlation_ms=3.0):
    """Ornstein-Uhlenbeck current, rounded to 1 pA: what the digital-to-analogue converter gave."""
    keep = math.exp(-step / correlation_ms)
    kicks = rng.standard_normal(steps) * sd * math.sqrt(1.0 - keep * keep)
    current = numpy.empty(steps)
    x = sd * rng.standard_normal()
    for i in range(steps):
        current[i] = x
        x = x * keep + kicks[i]
    return numpy.round(mean + current, 3)


def simulate_escape(rng, cell, current):
    """Spike times and the potential at the samples, from rest and no spike before the start."""
    kappa = [[a * tau * (1.0 - math.exp(-STEP / tau)), math.exp(-STEP / tau), 0.0]
             for a, tau in cell["kappa"].terms]
    # eta and theta_1 as states that jump at a spike and decay: [jump, tau, decay, half decay, state]
    history = [[[a, tau, math.exp(-STEP / tau), math.exp(-0.5 * STEP / tau), 0.0]
                for a, tau in cell[name].terms] for name in ("eta", "theta_1")]
    eta, theta_1 = history
    resting, threshold = cell["resting"], cell["threshold"]
    delta, refractory = cell["noise_level"], cell["refractory"]
    potential = numpy.empty(len(current))
    spikes = []
    free_from = -1.0  # end of the refractory time
    uniform = rng.random((len(current), 2))
    injected = current.tolist()
    filtered = 0.0
    for i, value in enumerate(injected):
        start = i * STEP
        potential[i] = resting + filtered + sum(s[4] for s in eta)
        before = filtered
        filtered = 0.0
        for k in kappa:
            k[2] = k[2] * k[1] + k[0] * value
            filtered += k[2]
        distance = (resting + 0.5 * (before + filtered) - threshold
                    + sum(s[4] * s[3] for s in eta) - sum(s[4] * s[3] for s in theta_1))
        open_from = max(start, free_from)
        open_ms = start + STEP - open_from
        for part in history:
            for s in part:
                s[4] *= s[2]
        if open_ms > 0.0 and uniform[i, 0] < -math.expm1(-math.exp(distance / delta) * open_ms):
            spike = open_from + uniform[i, 1] * open_ms
            spikes.append(spike)
            free_from = spike + refractory
            for part in history:
                for s in part:
                    s[4] += s[0] * math.exp(-(start + STEP - spike) / s[1])
    return numpy.array(spikes), potential


def spike_shape(lag):
    """What a spike adds to the potential: mV at a lag in ms; the -20 mV level is crossed near 0."""
    rise = numpy.clip((lag + 0.30) / 0.60, 0.0, 1.0)
    fall = numpy.exp(-numpy.clip(lag - 0.30, 0.0, None) / 0.45)
    return 78.0 * rise * rise * (3.0 - 2.0 * rise) * fall


def recorded_voltage(rng, potential, spikes, step, noise_sd, noise_ms, draw_spikes):
    """Potential plus drawn spikes plus AR(1) noise, as the amplifier shows it (0.01 mV)."""
    steps = len(potential)
    keep = math.exp(-step / noise_ms)
    kicks = rng.standard_normal(steps) * noise_sd * math.sqrt(1.0 - keep * keep)
    noise = numpy.empty(steps)
    x = noise_sd * rng.standard_normal()
    for i in range(steps):
        noise[i] = x
        x = x * keep + kicks[i]
    voltage = potential + noise
    if draw_spikes:
        for spike in spikes:
            first = max(0, math.ceil((spike - 0.30) / step))
            last = min(steps, math.ceil((spike + 4.5) / step))
            voltage[first:last] += spike_shape(numpy.arange(first, last) * step - spike)
    return numpy.round(voltage, 2)


def simulate_conductances(rng, current, private_sd):
    """Wang & Buzsaki 1996, forward Euler at 0.02 ms; returns the potential at the samples."""
    substeps = 5
    dt = STEP / substeps
    keep = math.exp(-STEP / 3.0)
    kicks = (rng.standard_normal(len(current)) * private_sd * math.sqrt(1.0 - keep * keep)).tolist()
    exp = math.exp
    v, h, n, private = -64.0, 0.78, 0.09, 0.0
    potential = numpy.empty(len(current))
    for i, value in enumerate(current.tolist()):
        potential[i] = v
        private = private * keep + kicks[i]
        drive = 10.0 * (value + private)  # uA/cm^2
        for _ in range(substeps):
            a = v + 35.0
            am = 1.0 if abs(a) < 1e-7 else -0.1 * a / (exp(-0.1 * a) - 1.0)
            m = am / (am + 4.0 * exp(-(v + 60.0) / 18.0))
            a = v + 34.0
            an = 0.1 if abs(a) < 1e-7 else -0.01 * a / (exp(-0.1 * a) - 1.0)
            slope = (drive - 0.1 * (v + 65.0) - 35.0 * m * m * m * h * (v - 55.0)
                     - 9.0 * n * n * n * n * (v + 90.0))
            h += dt * 5.0 * (0.07 * exp(-(v + 58.0) / 20.0) * (1.0 - h)
                             - h / (exp(-0.1 * (v + 28.0)) + 1.0))
            n += dt * 5.0 * (an * (1.0 - n) - 0.125 * exp(-(v + 44.0) / 80.0) * n)
            v += dt * slope
    return potential


def level_crossings(potential, level=-20.0):
    """Upward crossings of a level, interpolated between the samples."""
    up = numpy.flatnonzero((potential[:-1] < level) & (potential[1:] >= level))
    share = (level - potential[up]) / (potential[up + 1] - potential[up])
    return (up + share) * STEP


def write_samples(path, step, current, voltage=None):
    """CSV with a header, gzip'd without a time stamp so that the same bytes come out every time."""
    lines = ["time_ms,current_nA" if voltage is None else "time_ms,current_nA,voltage_mV"]
    for i, value in enumerate(current):
        line = "%.1f,%.3f" % (i * step, value)
        lines.append(line if voltage is None else "%s,%.2f" % (line, voltage[i]))
    with open(path, "wb") as raw, gzip.GzipFile("", "wb", 9, raw, mtime=0) as out:
        out.write(("\n".join(lines) + "\n").encode())


def write_spikes(path, spikes):
    with open(path, "w", encoding="ascii") as out:
        out.write("spike_ms\n" + "".join("%.3f\n" % spike for spike in spikes))


def write_sheet(path, name, about, voltage, repeats):
    lines = ["# %s" % about, 'cell = "%s"' % name, "", "[[sweep]]", 'name = "noise"',
             'recording = "noise.csv.gz"']
    if not voltage:
        lines.append('spikes = "noise_spikes.csv"')
    lines.append('use = "estimate"')
    for k in range(1, repeats + 1):
        lines += ["", "[[sweep]]", 'name = "frozen-%d"' % k, 'recording = "frozen.csv.gz"',
                  'spikes = "frozen_%d_spikes.csv"' % k, 'use = "predict"', 'repeats = "frozen"']
    with open(path, "w", encoding="ascii") as out:
        out.write("\n".join(lines) + "\n")


ABOUT = {
    "n03": "Invented cell: regular firing, current, potential and frozen repeats.",
    "n07": "Invented cell: current and spike times only, no potential.",
    "n11": "Invented cell: bursts, because eta lifts the potential after a spike.",
    "n14": "Invented cell outside the model class: a conductance-based neuron.",
}


def report(name, spikes, seconds):
    intervals = numpy.diff(spikes)
    print("%s: %d spikes, %.1f Hz, CV %.2f, %d intervals under 8 ms" % (
        name, len(spikes), len(spikes) / seconds, intervals.std() / intervals.mean(),
        (intervals < 8.0).sum()))


def make_cell(directory, name, stream):
    where = os.path.join(directory, name)
    os.makedirs(where, exist_ok=True)
    rng = numpy.random.Generator(numpy.random.Philox(key=[SEED, stream]))
    escape = name in CELLS
    cell = CELLS[name] if escape else CONDUCTANCE
    with_voltage = cell.get("voltage", True)
    step = STEP * cell["every"]

    def current_of(seconds):
        return fluctuating_current(rng, round(1000.0 * seconds / step), step, cell["mean"],
                                   cell["sd"])

    def run(current):
        """Spikes, and the potential at the samples; the current is held between its samples."""
        held = numpy.repeat(current, cell["every"])
        if escape:
            spikes, potential = simulate_escape(rng, cell, held)
        else:
            potential = simulate_conductances(rng, held, cell["private_sd"])
            spikes = level_crossings(potential)
        return spikes, potential[::cell["every"]]

    current = current_of(cell["seconds"])
    spikes, potential = run(current)
    report(name, spikes, cell["seconds"])
    if with_voltage:
        voltage = recorded_voltage(rng, potential, spikes, step, cell["noise_sd"],
                                   cell["noise_ms"], draw_spikes=escape)
        write_samples(os.path.join(where, "noise.csv.gz"), step, current, voltage)
    else:
        write_samples(os.path.join(where, "noise.csv.gz"), step, current)
        write_spikes(os.path.join(where, "noise_spikes.csv"), spikes)

    frozen = current_of(cell["repeat_seconds"])
    write_samples(os.path.join(where, "frozen.csv.gz"), step, frozen)
    for k in range(1, cell["repeats"] + 1):
        spikes, _ = run(frozen)
        write_spikes(os.path.join(where, "frozen_%d_spikes.csv" % k), spikes)
    write_sheet(os.path.join(where, "cell.toml"), name, ABOUT[name], with_voltage, cell["repeats"])


def write_truth(path):
    rows = ["cell,name,value,unit"]
    for name, cell in CELLS.items():
        for key, label, unit in (("noise_level", "noise_level", "mV"),
                                 ("threshold", "threshold", "mV"),
                                 ("resting", "resting_potential", "mV"),
                                 ("refractory", "refractory", "ms")):
            rows.append("%s,%s,%g,%s" % (name, label, cell[key], unit))
        rows.append("%s,input_resistance,%g,MOhm" % (name, cell["kappa"].integral()))
        for kernel, unit in (("kappa", "mV/(nA ms)"), ("eta", "mV"), ("theta_1", "mV")):
            for j, (a, tau) in enumerate(cell[kernel].terms, 1):
                rows.append("%s,%s_amplitude_%d,%g,%s" % (name, kernel, j, a, unit))
                rows.append("%s,%s_time_constant_%d,%g,ms" % (name, kernel, j, tau))
        if cell["voltage"]:
            rows.append("%s,voltage_noise_sd,%g,mV" % (name, cell["noise_sd"]))
            rows.append("%s,voltage_noise_correlation_time,%g,ms" % (name, cell["noise_ms"]))
    with open(path, "w", encoding="ascii") as out:
        out.write("\n".join(rows) + "\n")


def main():
    directory = sys.argv[1] if len(sys.argv) > 1 else os.path.dirname(os.path.abspath(__file__))
    for stream, name in enumerate(("n03", "n07", "n11", "n14"), 1):
        make_cell(directory, name, stream)
    write_truth(os.path.join(directory, "truth.csv"))


if __name__ == "__main__":
    main()

#!/usr/bin/python3
"""Times whole fits against R and against each other, in turn, and prints ratios.

    tests/bench/whole_programs.py BUILD_DIR [--repeats 5] [--no-r]

BUILD_DIR is configured with -DSOFTSILL_BUILD_BENCH=ON. R's glm.fit runs once: it takes a minute and
some gigabytes. Nothing here passes or fails; README.md beside this file keeps what was measured.
"""

import argparse
import os
import pathlib
import statistics
import subprocess
import tempfile
import time

R_SCRIPT = """
n <- {rows}; p <- {columns}
x <- matrix(readBin("{prefix}.rows", "double", n * p), n, p)
y <- readBin("{prefix}.spikes", "double", n)
took <- system.time(f <- glm.fit(x, y, family = poisson(), offset = rep(log(0.1), n),
                                 control = list(epsilon = 1e-10, maxit = 60)))
mu <- f$fitted.values
cat(sprintf("seconds=%.3f log_likelihood=%.6f iterations=%d rank=%d converged=%d\\n", took[["elapsed"]],
            sum(y * log(mu / 0.1)) - sum(mu), f$iter, f$rank, f$converged))
"""


def run(command):
    """Runs a command; returns its key=value words, wall seconds and peak memory in MB."""
    begin = time.monotonic()
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    text = process.stdout.read()
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode != 0:
        raise SystemExit(f"{' '.join(command)} ended with status {process.returncode}")
    words = dict(word.split("=", 1) for word in text.split() if "=" in word)
    words["wall"] = time.monotonic() - begin
    words["memory_MB"] = usage.ru_maxrss / 1024
    return words


def medians(program, cases, repeats):
    """Runs all cases in turn, `repeats` times; returns name -> (median, low, high) of seconds."""
    seconds = {name: [] for name in cases}
    last = {}
    for _ in range(repeats):
        for name, words in cases.items():
            last[name] = run([program, *words])
            seconds[name].append(float(last[name]["seconds"]))
    return {name: (statistics.median(s), min(s), max(s)) for name, s in seconds.items()}, last


def table(title, times, unit_name):
    print(f"\n{title}")
    first = next(iter(times.values()))[0]
    for name, (middle, low, high) in times.items():
        print(f"  {name:22s}{middle:9.3f} s  ({low:.3f} .. {high:.3f})  {middle / first:6.2f} x {unit_name}")


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("build", type=pathlib.Path)
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--no-r", action="store_true")
    words = parser.parse_args()
    program = str(words.build / "tests/bench/fit_cost")
    print(f"load before: {os.getloadavg()[0]:.2f} on {os.cpu_count()} cores")

    times, last = medians(program, {
        "spikes and potential": ("fit", "100", "0.05", "joint"),
        "spikes alone": ("fit", "100", "0.05", "spikes"),
    }, words.repeats)
    table("Fit of 100 s at 20 kHz, three spline kernels, smoothing and intervals", times, "the first")
    for name, result in last.items():
        print(f"  {name}: {result['coordinates']} coordinates, {result['nodes']} nodes, "
              f"{result['spikes']} spikes, {result['memory_MB']:.0f} MB, {result['status']}")

    rates, _ = medians(program, {f"{k} kHz": ("fit", "100", str(1 / k), "joint")
                                 for k in (10, 20, 50)}, words.repeats)
    table("Cost against sampling rate (100 s)", rates, "10 kHz")
    lengths, _ = medians(program, {f"{s} s": ("fit", str(s), "0.05", "joint")
                                   for s in (50, 100, 200, 400)}, max(1, words.repeats // 2))
    table("Cost against duration (20 kHz)", lengths, "50 s")

    if words.no_r:
        return
    with tempfile.TemporaryDirectory() as folder:
        prefix = folder + "/dense"
        size = run([program, "rows", "100", "0.05", prefix])
        script = folder + "/glm.R"
        pathlib.Path(script).write_text(R_SCRIPT.format(prefix=prefix, **{
            k: size[k] for k in ("rows", "columns")}))
        dense = run(["Rscript", script])
        ours = run([program, "same-rows", "100", "0.05"])
    print(f"\nR's glm.fit on {size['rows']} x {size['columns']} dense rows: {dense['seconds']} s, "
          f"{dense['memory_MB']:.0f} MB, rank {dense['rank']}, {dense['iterations']} iterations")
    print(f"  log-likelihood on the same rows: R {dense['log_likelihood']}, "
          f"ours {ours['log_likelihood']}, difference "
          f"{float(ours['log_likelihood']) - float(dense['log_likelihood']):.2e} nats")
    for name, (middle, _, _) in times.items():
        print(f"  {name}: {float(dense['seconds']) / middle:.0f} times faster, "
              f"1/{dense['memory_MB'] / last[name]['memory_MB']:.1f} of the memory")


if __name__ == "__main__":
    main()

"""softsill simulate: what it writes, that it repeats itself, how it ends."""

import csv
import hashlib
import json
import math
import os
import unittest

from program import DEMO, EXPONENTIALS, ScratchTest, run

# 50 Hz and a dead time of 4 ms: rate 1 / (1 / 50 Hz + 4 ms) = 41.6667 Hz, CV 1 / 1.2.
DEAD_TIME = """threshold_mV = 0
noise_level_mV = 1
refractory_ms = 4
[escape]
lambda_0_per_ms = 0.05
"""

CELL = """name = "cell"
resting_potential_mV = -65
threshold_mV = -55
noise_level_mV = 1.5
refractory_ms = 2
[kappa]
resistance_MOhm = 100
tau_m_ms = 20
[eta]
family = "exponentials"
amplitudes = [-12, -2]
time_constants_ms = [20, 150]
"""


class SimulateCommand(ScratchTest):
    def current(self, samples, value=0.1, column="current_nA"):
        lines = ["time_ms," + column]
        lines += ["%.1f,%g" % (0.1 * i, value) for i in range(samples)]
        return self.write("current.csv", "\n".join(lines) + "\n")

    def read(self, name, out=None):
        with open(os.path.join(out or self.out, name), encoding="utf-8") as file:
            return file.read()

    def summary(self):
        return json.loads(self.read("simulation.json"))

    def trains(self, trials):
        trains = [[] for _ in range(trials)]
        for row in csv.DictReader(self.read("trains.csv").splitlines()):
            trains[int(row["trial"]) - 1].append(float(row["spike_ms"]))
        return trains

    def simulate(self, model, current, *words):
        return run("simulate", model, "--current", current, "--out", self.out, *words)

    def test_rate_variation_and_files(self):
        model = self.write("model.toml", DEAD_TIME)
        current = self.current(100000)
        result = self.simulate(model, current, "--trials", "50", "--seed", "7")
        self.assertEqual(result.returncode, 0, result.stderr)
        trains = self.trains(50)
        summary = self.summary()
        count = sum(len(train) for train in trains)
        self.assertEqual(summary["spikes"], count)
        self.assertEqual(summary["spikes_per_trial"], [len(train) for train in trains])
        self.assertEqual(summary["trials"], 50)
        self.assertAlmostEqual(summary["mean_rate_hz"], count / 500.0, 9)
        self.assertAlmostEqual(summary["mean_rate_hz"], 41.6667,
                               delta=3.3 * 41.6667 / 1.2 / math.sqrt(count))
        self.assertAlmostEqual(summary["interval_cv"], 1 / 1.2, delta=3.3 / math.sqrt(count))
        for train in trains:
            self.assertGreaterEqual(train[0], 0.0)
            self.assertLess(train[-1], 10000.0)
            for before, after in zip(train, train[1:]):
                self.assertGreaterEqual(after - before, 4.0 - 1e-9)
        self.assertIn("41.", result.stdout)
        self.assertIn("seed", result.stdout)
        provenance = summary["provenance"]
        self.assertEqual(provenance["seed"], 7)
        self.assertIn("--trials 50", provenance["command_line"])
        for entry, path in zip(provenance["inputs"], (model, current)):
            self.assertEqual(entry["path"], path)
            with open(path, "rb") as file:
                self.assertEqual(entry["sha256"], hashlib.sha256(file.read()).hexdigest())

    def test_same_seed_same_trains_at_any_thread_count(self):
        model = self.write("model.toml", CELL)
        current = os.path.join(DEMO, "n03", "frozen.csv.gz")
        texts = []
        for words in (["--threads", "1"], ["--threads", "3"], [], ["--seed", "2"]):
            result = self.simulate(model, current, "--trials", "6", *words)
            self.assertEqual(result.returncode, 0, result.stderr)
            texts.append(self.read("trains.csv"))
        self.assertEqual(texts[0], texts[1])
        self.assertEqual(texts[0], texts[2])
        self.assertNotEqual(texts[0], texts[3])
        self.assertGreater(len(texts[0].splitlines()), 50)

    def test_mean_voltage_comes_and_goes(self):
        model = self.write("model.toml", CELL)
        current = self.current(5000, 0.05)
        words = ["--trials", "3", "--before", "first"]
        self.assertEqual(self.simulate(model, current, "--mean-voltage", *words).returncode, 0)
        rows = list(csv.DictReader(self.read("mean_voltage.csv").splitlines()))
        self.assertEqual(len(rows), 5000)
        self.assertEqual(float(rows[0]["time_ms"]), 0.05)
        # E_0 + R I = -65 mV + 100 MOhm 0.05 nA until the first spike.
        self.assertAlmostEqual(float(rows[0]["mean_u_mV"]), -60.0, 5)
        self.assertEqual(self.simulate(model, current, *words).returncode, 0)
        self.assertFalse(os.path.exists(os.path.join(self.out, "mean_voltage.csv")))

    def test_input_before_the_start(self):
        model = self.write("model.toml", CELL.replace("-55", "100"))
        current = self.current(2000, 0.05)
        for word, start in (("zero", -65.0), ("first", -60.0), ("holding=-0.1", -75.0)):
            self.assertEqual(
                self.simulate(model, current, "--mean-voltage", "--before", word).returncode, 0)
            row = self.read("mean_voltage.csv").splitlines()[1]
            # 0.05 ms later a membrane of 20 ms has gone 0.25 % of its way to -60 mV.
            expected = -60.0 + (start + 60.0) * math.exp(-0.05 / 20.0)
            self.assertAlmostEqual(float(row.split(",")[1]), expected, 5)
            self.assertEqual(self.summary()["spikes"], 0)
            self.assertTrue(self.summary()["silent"])
            self.assertIsNone(self.summary()["interval_cv"])

    def test_written_model_gives_the_same_trains(self):
        model = self.write("model.toml", CELL)
        current = self.current(20000)
        self.assertEqual(self.simulate(model, current, "--trials", "3").returncode, 0)
        first = self.read("trains.csv")
        copy = self.write("copy.toml", self.read("model.toml"))
        self.assertEqual(self.simulate(copy, current, "--trials", "3").returncode, 0)
        self.assertEqual(self.read("trains.csv"), first)

    def test_an_estimate_is_a_model(self):
        sheet = self.write("cell.toml", '[[sweep]]\nrecording = "%s"\nstart_ms = 0\nend_ms = 8000\n'
                           % os.path.join(DEMO, "n03", "noise.csv.gz"))
        variant = self.write("variant.toml", EXPONENTIALS)
        fit = run("fit", sheet, "--variant", variant, "--out", self.path("fit"), "--before", "zero")
        self.assertIn(fit.returncode, (0, 3), fit.stderr)
        estimate = self.path("fit", "estimate.json")
        result = self.simulate(estimate, os.path.join(DEMO, "n03", "frozen.csv.gz"),
                               "--trials", "20")
        self.assertEqual(result.returncode, fit.returncode, result.stderr)
        with open(estimate, encoding="utf-8") as file:
            spikes = json.load(file)["spikes"]
        # Another stretch of the same kind of current: the rate is the cell's to within a factor 2.
        rate = self.summary()["mean_rate_hz"]
        self.assertLess(abs(math.log(rate / (spikes / 8.0))), math.log(2.0))

    def test_runaways_end_with_status_3(self):
        model = self.write("model.toml", DEAD_TIME.replace("refractory_ms = 4", "refractory_ms = 0")
                           + '[eta]\nfamily = "exponentials"\namplitudes = [6]\n'
                           + "time_constants_ms = [50]\n")
        result = self.simulate(model, self.current(100000), "--trials", "4")
        self.assertEqual(result.returncode, 3)
        self.assertIn("4 of 4 trials ran away", result.stderr)
        runaways = self.summary()["runaways"]
        self.assertEqual([entry["trial"] for entry in runaways], [1, 2, 3, 4])
        for entry, train in zip(runaways, self.trains(4)):
            self.assertEqual(entry["stopped_ms"], train[-1])
            self.assertLess(entry["stopped_ms"], 10000.0)

    def test_an_input_that_is_no_current(self):
        model = self.write("model.toml", 'input_unit = "dB"\nscale = "noise_level"\n'
                           'threshold = 4\n[kappa]\nfamily = "steps"\nedges_ms = [0, 5]\n'
                           "values = [0.1]\n")
        result = self.simulate(model, self.current(20000, 1.0, "input"))
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertGreater(self.summary()["spikes"], 10)
        refused = self.simulate(model, self.current(20000, 1.0, "input"), "--mean-voltage")
        self.assertEqual(refused.returncode, 1)
        self.assertIn("no potential in mV", refused.stderr)

    def test_json_on_stdout(self):
        model = self.write("model.toml", DEAD_TIME)
        result = self.simulate(model, self.current(2000), "--json")
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertEqual(json.loads(result.stdout), self.summary())
        quiet = self.simulate(model, self.current(2000), "--quiet")
        self.assertEqual(quiet.stdout + quiet.stderr, "")

    def test_bad_files_are_named(self):
        model = self.write("model.toml", DEAD_TIME)
        current = self.current(2000)
        cases = [
            (self.path("nowhere.toml"), current, "nowhere.toml"),
            (model, self.path("nowhere.csv"), "nowhere.csv"),
            (self.write("a.toml", DEAD_TIME + "lambda_0 = 3\n"), current, "'lambda_0_per_ms'"),
            (self.write("b.toml", "threshold_mV = 0\n"), current, "noise_level_mV is missing"),
            (self.write("c.json", "{}"), current, "c.json"),
            (self.write("d.json", "{ not json"), current, "d.json"),
            (model, self.write("nan.csv", "time_ms,current_nA\n0,0\n0.1,nan\n"), "nan.csv"),
            (model, self.write("empty.csv", ""), "empty.csv"),
        ]
        for bad_model, bad_current, part in cases:
            result = self.simulate(bad_model, bad_current)
            self.assertEqual(result.returncode, 1, part)
            self.assertIn(part, result.stderr)
            self.assertEqual(len(result.stderr.splitlines()), 1, result.stderr)
            self.assertEqual(result.stdout, "")

    def test_bad_options_are_usage_errors(self):
        model = self.write("model.toml", DEAD_TIME)
        current = self.current(100)
        for words in (["--trials", "0"], ["--trials", "many"], ["--step-ms", "0"],
                      ["--step-ms", "-1"], ["--before", "noon"], ["--threads", "-1"],
                      ["--runaway-hz", "0"], ["--seed", "x"], ["--steps", "3"]):
            result = self.simulate(model, current, *words)
            self.assertEqual(result.returncode, 2, words)
            self.assertFalse(os.path.exists(self.out))


if __name__ == "__main__":
    unittest.main()

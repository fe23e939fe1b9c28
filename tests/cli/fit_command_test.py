"""softsill fit: what it prints, what it writes, how it ends."""

import csv
import json
import os
import pty
import signal
import subprocess
import time
import unittest

from program import DEMO, EXPONENTIALS, PROGRAM, ScratchTest, run

SHEET = """cell = "short"
[[sweep]]
name = "noise"
recording = "{recording}"
{spikes}
start_ms = 0
end_ms = {end}
"""


class FitCommand(ScratchTest):
    def sheet(self, cell, end):
        """A sheet that names a demo recording but analyses only its start."""
        folder = os.path.join(DEMO, cell)
        spikes = ""
        if cell == "n07":
            spikes = 'spikes = "%s"' % os.path.join(folder, "noise_spikes.csv")
        return self.write("cell.toml", SHEET.format(
            recording=os.path.join(folder, "noise.csv.gz"), spikes=spikes, end=end))

    def rows(self, name):
        with open(os.path.join(self.out, name), encoding="utf-8", newline="") as file:
            return list(csv.DictReader(file))

    def estimate(self):
        with open(os.path.join(self.out, "estimate.json"), encoding="utf-8") as file:
            return json.load(file)

    def test_potential_recorded(self):
        sheet = self.sheet("n03", 30000)
        result = run("fit", sheet, "--out", self.out, "--before", "zero")
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertEqual(result.stderr, "")
        for line in result.stdout.splitlines():
            self.assertLessEqual(len(line), 100, line)
        for words in ("noise level Delta", "threshold theta_0", "resting potential E_0",
                      "input resistance", "kappa consistency", "found by",
                      os.path.join(self.out, "estimate.json")):
            self.assertIn(words, result.stdout)

        estimate = self.estimate()
        self.assertEqual(estimate["status"], "converged")
        self.assertEqual(estimate["mode"], "spikes_and_voltage")
        self.assertGreater(estimate["spikes"], 300)
        for key in ("noise_level", "threshold", "resting_potential"):
            quantity = estimate[key]
            self.assertEqual(quantity["unit"], "mV")
            self.assertLess(quantity["low"], quantity["value"])
            self.assertLess(quantity["value"], quantity["high"])
        self.assertTrue({"kappa", "eta", "theta_1"} <= set(estimate["kernels"]))
        self.assertGreater(estimate["effective_degrees_of_freedom"], 5)
        provenance = json.dumps(estimate["provenance"])
        for words in (sheet, "fit %s --out %s --before zero" % (sheet, self.out)):
            self.assertIn(words, provenance)

        kernels = self.rows("kernels.csv")
        self.assertEqual(list(kernels[0]), ["kernel", "lag_ms", "value", "low", "high", "unit"])
        self.assertTrue({"kappa", "eta", "theta_1"} <= {row["kernel"] for row in kernels})
        for row in kernels:
            self.assertLessEqual(float(row["low"]), float(row["value"]) + 1e-12)
            self.assertLessEqual(float(row["value"]), float(row["high"]) + 1e-12)
        parameters = self.rows("parameters.csv")
        self.assertEqual(list(parameters[0]), ["name", "value", "low", "high", "unit", "method"])
        level = next(row for row in parameters if row["name"] == "noise_level")
        self.assertEqual(level["method"], "profile likelihood")
        self.assertAlmostEqual(float(level["value"]), estimate["noise_level"]["value"], places=6)

    def test_spikes_alone_claim_no_millivolts(self):
        result = run("fit", self.sheet("n07", 40000), "--out", self.out, "--before", "zero")
        self.assertEqual(result.returncode, 0, result.stderr)
        estimate = self.estimate()
        self.assertEqual(estimate["mode"], "spikes_alone")
        self.assertIsNone(estimate["noise_level"].get("value"))
        self.assertTrue(estimate["noise_level"]["why_absent"])
        for row in self.rows("kernels.csv"):
            self.assertNotIn("mV", row["unit"])
        level = [row for row in self.rows("parameters.csv") if row["name"] == "noise_level"]
        self.assertEqual([row["value"] for row in level], [""])

    def test_anchor_gives_millivolts_and_its_uncertainty_widens(self):
        sheet = self.sheet("n07", 40000)
        widths = []
        for anchor in ("resistance=210MOhm", "resistance=210±30MOhm"):
            result = run("fit", sheet, "--out", self.out, "--before", "zero", "--anchor", anchor)
            self.assertEqual(result.returncode, 0, result.stderr)
            self.assertIn("anchored", result.stdout)
            level = self.estimate()["noise_level"]
            self.assertEqual(level["unit"], "mV")
            widths.append(level["high"] - level["low"])
        self.assertGreater(widths[1], 1.5 * widths[0])

    def test_exponentials_come_with_their_equations_and_splines_remove_stale_ones(self):
        sheet = self.sheet("n07", 40000)
        variant = self.write("variant.toml", EXPONENTIALS)
        result = run("fit", sheet, "--out", self.out, "--before", "zero", "--variant", variant)
        self.assertEqual(result.returncode, 0, result.stderr)
        equations = os.path.join(self.out, "equations.csv")
        self.assertIn(equations, result.stdout)
        self.assertGreater(os.path.getsize(equations), 50)
        self.assertEqual(run("fit", sheet, "--out", self.out, "--before", "zero").returncode, 0)
        self.assertFalse(os.path.exists(equations))

    def test_json_on_stdout_is_the_file(self):
        result = run("--json", "fit", self.sheet("n07", 30000), "--out", self.out, "--before", "zero")
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertEqual(json.loads(result.stdout), self.estimate())

    def test_quiet_says_nothing(self):
        result = run("fit", self.sheet("n07", 30000), "--out", self.out, "--before", "zero", "--quiet")
        self.assertEqual((result.returncode, result.stdout, result.stderr), (0, "", ""))

    def test_threads_do_not_change_a_digit(self):
        sheet = self.sheet("n07", 30000)
        found = []
        for threads in ("1", "2"):
            run("fit", sheet, "--out", self.out, "--before", "zero", "--threads", threads)
            with open(os.path.join(self.out, "kernels.csv"), "rb") as file:
                found.append(file.read())
        self.assertEqual(found[0], found[1])

    def test_not_converged_ends_with_3_and_says_why(self):
        # One iteration is too few where time constants are fitted as well.
        variant = self.write("variant.toml", EXPONENTIALS.replace("= false", "= true"))
        result = run("fit", self.sheet("n03", 20000), "--out", self.out, "--before", "zero",
                     "--variant", variant, "--max-iterations", "1")
        self.assertEqual(result.returncode, 3, result.stdout + result.stderr)
        self.assertIn("not to be trusted", result.stderr)
        estimate = self.estimate()
        self.assertNotIn(estimate["status"], ("converged", "at_boundary"))
        self.assertIsNone(estimate["noise_level"].get("value"))

    def test_interrupt_ends_with_130_and_writes_nothing(self):
        # Fitted time constants of several starts: long enough to be interrupted.
        variant = self.write("variant.toml", EXPONENTIALS.replace("= false", "= true"))
        with subprocess.Popen([PROGRAM, "fit", self.sheet("n03", 50000), "--out", self.out,
                               "--variant", variant, "--starts", "1000"], stdout=subprocess.PIPE,
                              stderr=subprocess.PIPE, text=True) as process:
            # The directory is made when the data have been read and the fit begins.
            deadline = time.monotonic() + 60
            while not os.path.isdir(self.out) and time.monotonic() < deadline:
                time.sleep(0.02)
            time.sleep(0.5)
            process.send_signal(signal.SIGINT)
            _, error = process.communicate(timeout=60)
        self.assertEqual(process.returncode, 130, error)
        self.assertIn("interrupted", error)
        self.assertEqual(os.listdir(self.out), [])

    def test_progress_only_on_a_terminal(self):
        leader, follower = pty.openpty()
        with subprocess.Popen([PROGRAM, "fit", self.sheet("n07", 30000), "--out", self.out,
                               "--before", "zero"], stdout=subprocess.DEVNULL,
                              stderr=follower) as process:
            os.close(follower)
            seen = b""
            while True:
                try:
                    piece = os.read(leader, 4096)
                except OSError:  # the other end is closed
                    break
                if not piece:
                    break
                seen += piece
        os.close(leader)
        self.assertEqual(process.returncode, 0)
        self.assertIn(b"\r\x1b[K", seen)
        self.assertIn(b" %  ", seen)
        self.assertTrue(seen.endswith(b"\r\x1b[K"), "the line is cleared at the end")

    def test_places_that_cannot_be_written(self):
        sheet = self.sheet("n07", 30000)
        in_the_way = self.write("file", "")
        result = run("fit", sheet, "--out", in_the_way)
        self.assertEqual(result.returncode, 1)
        self.assertIn(in_the_way, result.stderr)
        with open("/dev/full", "w", encoding="ascii") as full:
            status = subprocess.run([PROGRAM, "fit", sheet, "--out", self.out, "--before", "zero"],
                                    stdout=full, stderr=subprocess.PIPE, check=False).returncode
        self.assertEqual(status, 1)

    def test_missing_files_are_one_line_and_status_1(self):
        for words in ((self.path("none.toml"), "--out", self.out),
                      (self.sheet("n07", 30000), "--out", self.out, "--variant", self.path("no.toml"))):
            result = run("fit", *words)
            self.assertEqual(result.returncode, 1)
            self.assertEqual(result.stderr.count("\n"), 1, result.stderr)
            self.assertEqual(result.stdout, "")


if __name__ == "__main__":
    unittest.main(verbosity=2)

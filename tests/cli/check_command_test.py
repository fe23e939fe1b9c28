"""softsill check: a page for people, JSON for programs."""

import hashlib
import json
import os
import unittest

from program import DEMO, run

SHEETS = [os.path.join(DEMO, cell, "cell.toml") for cell in ("n03", "n07", "n11", "n14")]


class CheckCommand(unittest.TestCase):
    def test_page_fits_a_terminal_and_has_all_parts(self):
        for sheet in SHEETS:
            with self.subTest(sheet):
                result = run("check", sheet)
                self.assertEqual(result.returncode, 0, result.stderr)
                self.assertEqual(result.stderr, "")
                for part in ("to estimate from", "Current", "Response", "What these data can tell",
                             "Findings"):
                    self.assertIn(part, result.stdout)
                for line in result.stdout.splitlines():
                    self.assertLessEqual(len(line), 100, line)

    def test_json_agrees_with_the_page_and_with_the_files(self):
        for sheet in SHEETS:
            with self.subTest(sheet):
                result = run("--json", "check", sheet)
                self.assertEqual(result.returncode, 0, result.stderr)
                report = json.loads(result.stdout)
                page = run("check", sheet).stdout
                self.assertIn("%d spikes" % report["estimate"]["spikes"], page)
                self.assertEqual(
                    sum(sweep["spikes"]["count"] for sweep in report["sweeps"]),
                    report["estimate"]["spikes"] + report["predict"]["spikes"])
                for file in report["inputs"]:
                    path = os.path.join(os.path.dirname(sheet), os.path.basename(file["path"]))
                    with open(path, "rb") as content:
                        self.assertEqual(hashlib.sha256(content.read()).hexdigest(), file["sha256"])
                for finding in report["findings"]:
                    self.assertIn(finding["grade"], ("fine", "look", "stop"))
                    # What is not fine says what to do.
                    self.assertEqual(finding["remedy"] is None, finding["grade"] == "fine")
                self.assertNotEqual(report["worst"], "stop")

    def test_identifiability_follows_what_was_recorded(self):
        row = lambda *words: json.loads(run("--json", "check", *words).stdout)["identifiability"]
        self.assertEqual(row(SHEETS[0])["row"], "spikes_and_voltage")
        self.assertEqual(row(SHEETS[1])["row"], "spikes_alone")
        self.assertEqual(row(SHEETS[1], "--anchored")["row"], "spikes_anchored")
        self.assertIn("Delta in mV cannot", row(SHEETS[1])["sentence"])

    def test_quiet_is_quiet(self):
        result = run("--quiet", "check", SHEETS[1])
        self.assertEqual((result.returncode, result.stdout, result.stderr), (0, "", ""))


if __name__ == "__main__":
    unittest.main()

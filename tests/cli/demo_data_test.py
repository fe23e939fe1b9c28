"""The checked-in demo recordings are what their script makes, and small."""

import csv
import gzip
import os
import subprocess
import sys
import tempfile
import unittest

from program import DEMO, run


def content(path):
    opener = gzip.open if path.endswith(".gz") else open
    with opener(path, "rb") as file:
        return file.read()


class DemoData(unittest.TestCase):
    def test_the_script_makes_the_same_files_again(self):
        with tempfile.TemporaryDirectory() as directory:
            subprocess.run([sys.executable, "-B", os.path.join(DEMO, "make_demo.py"), directory],
                           check=True, capture_output=True, timeout=250)
            made = [os.path.relpath(os.path.join(folder, name), directory)
                    for folder, _, names in os.walk(directory) for name in names]
            self.assertGreater(len(made), 40)
            for name in made:
                # Compared unpacked: another zlib may pack the same text differently.
                self.assertEqual(content(os.path.join(directory, name)),
                                 content(os.path.join(DEMO, name)), name)

    def test_all_of_it_is_under_8_megabytes(self):
        total = sum(os.path.getsize(os.path.join(folder, name))
                    for folder, _, names in os.walk(DEMO) for name in names)
        self.assertLess(total, 8e6)

    def test_spikes_found_in_the_potential_are_those_that_were_drawn(self):
        # 12.9, 14.1 and 9.1 Hz: what make_demo.py prints about the trains before drawing them.
        for cell, spikes in (("n03", 645), ("n11", 634), ("n14", 363)):
            result = run("check", os.path.join(DEMO, cell, "cell.toml"))
            self.assertEqual(result.returncode, 0, result.stderr)
            self.assertRegex(result.stdout, r"\b%d\b" % spikes)

    def test_truth_covers_the_cells_inside_the_model_class(self):
        with open(os.path.join(DEMO, "truth.csv"), encoding="ascii", newline="") as file:
            rows = list(csv.DictReader(file))
        levels = {row["cell"]: float(row["value"]) for row in rows if row["name"] == "noise_level"}
        self.assertEqual(set(levels), {"n03", "n07", "n11"})
        for level in levels.values():
            self.assertTrue(0.8 <= level <= 2.0, level)


if __name__ == "__main__":
    unittest.main(verbosity=2)

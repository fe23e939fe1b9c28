"""What the README shows is true: its output is the program's, its files are read, its code runs.

  readme_test.py --update    writes the program's present output into the README
"""

import os
import re
import shlex
import shutil
import subprocess
import sys
import tempfile
import unittest

from program import DEMO, SOURCE_DIR, command_names, run

README = os.path.join(SOURCE_DIR, "README.md")
OUTPUT = re.compile(r"<!-- output of: softsill (.*?) -->\n```text\n(.*?)```", re.DOTALL)
NUMBER = re.compile(r"-?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


def text():
    with open(README, encoding="utf-8") as file:
        return file.read()


def blocks(language):
    return re.findall(r"^```%s\n(.*?)^```$" % language, text(), re.DOTALL | re.MULTILINE)


def shown_part(output):
    """The tables of parameters and kernels."""
    lines = output.splitlines()
    first = next(i for i, line in enumerate(lines) if line.split()[:3] == ["value", "low", "high"])
    kernels = next(i for i, line in enumerate(lines) if line.split()[:1] == ["kernel"])
    last = next(i for i in range(kernels, len(lines)) if not lines[i])
    return lines[first:last]


class Readme(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        cls.scratch = tempfile.TemporaryDirectory()
        os.symlink(os.path.join(SOURCE_DIR, "data"), os.path.join(cls.scratch.name, "data"))
        command, cls.shown = OUTPUT.search(text()).groups()
        cls.fit = run(*shlex.split(command), cwd=cls.scratch.name)

    @classmethod
    def tearDownClass(cls):
        cls.scratch.cleanup()

    def write(self, name, content):
        with open(os.path.join(self.scratch.name, name), "w", encoding="utf-8") as file:
            file.write(content)
        return name

    def test_output_is_what_the_program_prints(self):
        self.assertEqual(self.fit.returncode, 0, self.fit.stderr)
        shown, printed = self.shown.splitlines(), shown_part(self.fit.stdout)
        self.assertGreaterEqual(len(shown), 10)
        self.assertEqual(len(shown), len(printed), "run readme_test.py --update")
        for ours, theirs in zip(shown, printed):
            self.assertEqual(NUMBER.sub("#", ours).split(), NUMBER.sub("#", theirs).split())
            for a, b in zip(NUMBER.findall(ours), NUMBER.findall(theirs)):
                # Another compiler may move the last digit shown by one.
                last_digit = 10.0 ** -len(b.partition(".")[2])
                self.assertAlmostEqual(float(a), float(b),
                                       delta=max(1.01 * last_digit, 0.01 * abs(float(b))))

    def test_sheet_and_variant_are_read(self):
        sheet, variant, _ = blocks("toml")
        for name in ("frozen.csv.gz", "frozen_1_spikes.csv", "frozen_2_spikes.csv"):
            shutil.copy(os.path.join(DEMO, "n03", name), self.scratch.name)
        shutil.copy(os.path.join(DEMO, "n03", "noise.csv.gz"),
                    os.path.join(self.scratch.name, "s1.csv.gz"))
        self.write("cell.toml", sheet)
        self.write("variant.toml", variant)
        checked = run("check", "cell.toml", cwd=self.scratch.name)
        self.assertEqual(checked.returncode, 0, checked.stderr)
        self.assertIn("H07", checked.stdout)
        fitted = run("fit", "cell.toml", "--out", "H07", "--variant", "variant.toml", "--before", "zero",
                     cwd=self.scratch.name)
        self.assertEqual(fitted.returncode, 0, fitted.stderr)
        self.assertIn("membrane and two afterpotentials", fitted.stdout)
        self.assertIn("series resistance", fitted.stdout)

    def test_model_file_is_simulated(self):
        _, _, model = blocks("toml")
        current = os.path.join(DEMO, "n03", "frozen.csv.gz")
        result = run("simulate", self.write("model.toml", model), "--current", current, "--trials", "20",
                     "--out", "simulated", "--mean-voltage", cwd=self.scratch.name)
        self.assertEqual(result.returncode, 0, result.stderr)
        for name in ("trains.csv", "model.toml", "simulation.json", "mean_voltage.csv"):
            self.assertIn("`%s`" % name, text())
            self.assertTrue(os.path.exists(os.path.join(self.scratch.name, "simulated", name)), name)
        with open(os.path.join(self.scratch.name, "simulated", "trains.csv"), encoding="ascii") as file:
            self.assertGreater(len(file.readlines()), 100)

    def test_python_reads_the_results(self):
        (code,) = blocks("python")
        result = subprocess.run([sys.executable, "-c", code], cwd=self.scratch.name, text=True,
                                capture_output=True, check=False)
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertRegex(result.stdout, r"Delta = 1\.\d\d \(1\.\d\d \.\. 1\.\d\d\) mV")

    @unittest.skipUnless(shutil.which("Rscript"), "Rscript is not installed")
    def test_r_reads_the_results(self):
        (code,) = blocks("r")
        code = 'pdf("kappa.pdf")\n' + code + '\nstopifnot(nrow(kappa) > 50, kappa$value[1] > 5)\n'
        result = subprocess.run(["Rscript", self.write("read.R", code)], cwd=self.scratch.name,
                                text=True, capture_output=True, check=False)
        self.assertEqual(result.returncode, 0, result.stderr)

    def test_commands_named_exist(self):
        named = set(re.findall(r"softsill ([a-z]+) (?:SHEET|MODEL|data)", text()))
        self.assertEqual(named, set(command_names()))

    def test_files_named_exist(self):
        for path in re.findall(r"`((?:data|tests|\.ci)/[\w./]+|[A-Z]+\.md)`", text()):
            self.assertTrue(os.path.exists(os.path.join(SOURCE_DIR, path)), path)

    def test_schema_documents_every_key(self):
        import json
        with open(os.path.join(self.scratch.name, "results", "n03", "estimate.json"),
                  encoding="utf-8") as file:
            keys = json.load(file).keys()
        documented = set(re.findall(r"`(\w+)`", text()))
        self.assertEqual(set(keys) - documented, set())


def update():
    readme = text()
    found = OUTPUT.search(readme)
    with tempfile.TemporaryDirectory() as scratch:
        os.symlink(os.path.join(SOURCE_DIR, "data"), os.path.join(scratch, "data"))
        result = run(*shlex.split(found.group(1)), cwd=scratch)
    shown = "\n".join(shown_part(result.stdout)) + "\n"
    with open(README, "w", encoding="utf-8") as file:
        file.write(readme[:found.start(2)] + shown + readme[found.end(2):])


if __name__ == "__main__":
    if sys.argv[1:] == ["--update"]:
        update()
    else:
        unittest.main(verbosity=2)

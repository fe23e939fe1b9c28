"""Running the program from a test."""

import os
import re
import subprocess
import tempfile
import unittest

PROGRAM = os.environ["SOFTSILL"]
SOURCE_DIR = os.environ["SOFTSILL_SOURCE_DIR"]
DEMO = os.path.join(SOURCE_DIR, "data", "demo")


def run(*words, **options):
    """Runs softsill with these words; the result has returncode, stdout and stderr as text."""
    return subprocess.run([PROGRAM, *words], capture_output=True, text=True, check=False,
                          timeout=250, **options)


def command_names():
    """The commands that the top help lists, under its group headings."""
    names = []
    in_options = True
    for line in run("--help").stdout.splitlines():
        if re.match(r"\S.*:$", line):
            in_options = line in ("Options:", "Everywhere:", "Example:")
        match = re.match(r"  ([a-z][a-z-]*)(\s|$)", line)
        if match and not in_options:
            names.append(match.group(1))
    return names


# A variant whose estimate has integrate-and-fire equations.
EXPONENTIALS = """name = "exponentials"
[kappa]
family = "exponentials"
time_constants_ms = [15]
fit_time_constants = false
[eta]
family = "exponentials"
time_constants_ms = [10, 100]
fit_time_constants = false
[theta_1]
family = "absent"
"""


class ScratchTest(unittest.TestCase):
    """A test with a folder of its own; self.out in it is for results and does not exist yet."""

    def setUp(self):
        self.scratch = tempfile.TemporaryDirectory()
        self.addCleanup(self.scratch.cleanup)
        self.out = self.path("out")

    def path(self, *names):
        return os.path.join(self.scratch.name, *names)

    def write(self, name, text):
        with open(self.path(name), "w", encoding="utf-8") as file:
            file.write(text)
        return self.path(name)

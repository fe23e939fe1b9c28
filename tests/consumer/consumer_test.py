"""Installs into a scratch prefix, then builds and runs a project that only knows that prefix."""

import os
import re
import subprocess
import tempfile
import unittest

CMAKE = os.environ["CMAKE"]
BUILD = os.environ["SOFTSILL_BUILD_DIR"]
SOURCE = os.environ["SOFTSILL_SOURCE_DIR"]


def readme_program():
    """The one block of C++ in the README."""
    with open(os.path.join(SOURCE, "README.md"), encoding="utf-8") as file:
        blocks = re.findall(r"^```cpp\n(.*?)^```$", file.read(), re.DOTALL | re.MULTILINE)
    if len(blocks) != 1:
        raise AssertionError("README has %d blocks of C++, expected one" % len(blocks))
    return blocks[0]


class Consumer(unittest.TestCase):
    def command(self, *words, status=0):
        result = subprocess.run(words, capture_output=True, text=True, check=False, timeout=500)
        self.assertEqual(result.returncode, status, result.stdout + result.stderr)
        return result.stdout

    def test_readme_program_builds_against_the_installed_package(self):
        program = readme_program()
        self.assertLessEqual(len(program.splitlines()), 20)
        with tempfile.TemporaryDirectory() as scratch:
            prefix, build = os.path.join(scratch, "prefix"), os.path.join(scratch, "build")
            self.command(CMAKE, "--install", BUILD, "--prefix", prefix)
            for name in ("bin/softsill", "include/softsill/fit.hpp"):
                self.assertTrue(os.path.exists(os.path.join(prefix, name)), name)
            self.assertIn("softsill", self.command(os.path.join(prefix, "bin", "softsill"), "--version"))

            source = os.path.join(scratch, "readme.cpp")
            with open(source, "w", encoding="utf-8") as file:
                file.write(program)
            self.command(CMAKE, "-G", "Ninja", "-S", os.path.join(SOURCE, "tests", "consumer", "project"), "-B", build,
                         "-DCMAKE_PREFIX_PATH=" + prefix, "-DPROGRAM=" + source,
                         "-DCMAKE_BUILD_TYPE=Release", "-DSANITIZE=" + os.environ["SOFTSILL_SANITIZE"])
            self.command(CMAKE, "--build", build)
            self.command(os.path.join(build, "one_room"))
            said = self.command(os.path.join(build, "estimate_cell"),
                                os.path.join(SOURCE, "data", "demo", "n03", "cell.toml"))
            self.assertRegex(said, r"Converged")
            self.assertRegex(said, r"Delta = \d\.\d\d \(\d\.\d\d \.\. \d\.\d\d\) mV")


if __name__ == "__main__":
    unittest.main(verbosity=2)

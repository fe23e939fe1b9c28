"""Mistakes in what was typed: exit status 2, one short line on stderr, nothing on stdout."""

import os
import unittest

from program import DEMO, command_names, run

SHEET = os.path.join(DEMO, "n07", "cell.toml")


class Usage(unittest.TestCase):
    def mistake(self, *words):
        result = run(*words)
        self.assertEqual(result.returncode, 2, result.stderr)
        self.assertEqual(result.stdout, "")
        self.assertEqual(result.stderr.count("\n"), 1, result.stderr)
        self.assertTrue(result.stderr.startswith("softsill: "), result.stderr)
        self.assertLess(len(result.stderr), 400)
        return result.stderr

    def test_unknown_command_names_the_nearest(self):
        self.assertIn("'fit'", self.mistake("fitt", SHEET))
        self.assertIn("'check'", self.mistake("chekc"))
        self.assertIn("'simulate'", self.mistake("--quiet", "simulat"))

    def test_unknown_option_names_the_nearest(self):
        message = self.mistake("fit", SHEET, "--out", "x", "--anchr", "resistance=120MOhm")
        self.assertIn("'--anchr'", message)
        self.assertIn("--anchor", message)

    def test_missing_arguments(self):
        self.assertIn("SHEET", self.mistake("fit"))
        self.assertIn("--out", self.mistake("fit", SHEET))

    def test_surplus_argument(self):
        self.assertIn("'surplus'", self.mistake("fit", SHEET, "--out", "x", "surplus"))

    def test_values_that_cannot_be_read(self):
        for option, value in (("--anchor", "resistance=MOhm"), ("--anchor", "weight=3kg"),
                              ("--before", "holding=much"), ("--before", "yesterday"),
                              ("--starts", "0"), ("--starts", "many"), ("--threads", "-1"),
                              ("--level", "1.5"), ("--max-iterations", "0"), ("--seed", "x")):
            with self.subTest(option=option, value=value):
                self.mistake("fit", SHEET, "--out", "x", "%s=%s" % (option, value))

    def test_no_command_shows_the_help(self):
        result = run()
        self.assertEqual(result.returncode, 2)
        self.assertIn("Usage: softsill COMMAND", result.stdout)

    def test_options_without_a_command(self):
        self.mistake("--quiet")

    def test_every_command_refuses_an_unknown_option(self):
        for command in command_names():
            with self.subTest(command=command):
                self.assertIn("'--no-such-option'", self.mistake(command, "--no-such-option"))


if __name__ == "__main__":
    unittest.main(verbosity=2)

"""Walks the help: what the top page lists exists, and every page keeps its promises."""

import re
import unittest

from program import command_names, run


class Help(unittest.TestCase):
    def page(self, *words):
        result = run(*words)
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertEqual(result.stderr, "")
        for line in result.stdout.splitlines():
            self.assertLessEqual(len(line), 100, line)
        return result.stdout

    def test_top_page_lists_the_commands_in_groups(self):
        self.assertTrue({"check", "fit", "simulate"} <= set(command_names()), command_names())
        page = self.page("--help")
        self.assertRegex(page, r"Exit status: 0 done")
        self.assertNotIn("\nSubcommands:", page)

    def test_every_page_has_purpose_usage_defaults_and_an_example(self):
        for command in command_names():
            with self.subTest(command=command):
                page = self.page(command, "--help")
                self.assertRegex(page.splitlines()[0], r"^[A-Z].{20,}")
                self.assertRegex(page, r"\nUsage: softsill %s " % command)
                self.assertRegex(page, r"\nExamples?:\n +softsill %s .+" % command)
                # Every option that takes a number shows its default.
                for option, words in re.findall(
                        r"^  (?:-\w,)?(--[\w-]+) (?:N|MS|HZ|SHARE)\b(.*(?:\n {20,}.*)*)", page,
                        re.MULTILINE):
                    self.assertRegex(words, r"\[\S+\]$|(?i:default)|without it|left out", option)

    def test_short_help_is_the_same(self):
        for command in command_names():
            self.assertEqual(self.page(command, "-h"), self.page(command, "--help"))

    def test_version(self):
        self.assertRegex(self.page("--version"), r"^softsill \d+\.\d+\.\d+\n$")

    def test_examples_use_options_that_exist(self):
        for command in command_names():
            page = self.page(command, "--help")
            head, _, example = page.partition("Example")
            for option in set(re.findall(r"(?<!\w)--[a-z][a-z-]*", example)):
                self.assertIn(option, head, "%s in the example of %s" % (option, command))


if __name__ == "__main__":
    unittest.main(verbosity=2)

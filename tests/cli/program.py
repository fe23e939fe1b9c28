"""Running the program from a test."""

import os
import re
import subprocess

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

#!/usr/bin/python3
"""Every C++ file is formatted as .clang-format says; prints the ones that are not.

  check_format.py CLANG_FORMAT SOURCE_DIRECTORY
"""

import os
import subprocess
import sys


def main():
    clang_format, root = sys.argv[1:3]
    files = [os.path.join(directory, name)
             for top in ("include", "estimator", "metrics", "tests")
             for directory, _, names in os.walk(os.path.join(root, top))
             for name in names if name.endswith((".hpp", ".cpp"))]
    if not files:
        print("no C++ files under " + root)
        return 1
    run = subprocess.run([clang_format, "--dry-run", "-Werror"] + sorted(files), text=True,
                         capture_output=True, check=False)
    wrong = sorted({line.split(":")[0] for line in run.stderr.splitlines() if "error:" in line})
    for path in wrong:
        print("clang-format -i " + os.path.relpath(path, root))
    if run.returncode != 0 and not wrong:
        print(run.stderr)
    return 1 if run.returncode != 0 else 0


if __name__ == "__main__":
    sys.exit(main())

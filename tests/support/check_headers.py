#!/usr/bin/python3
"""Every public header compiles alone, without warnings, and twice in a row.

  check_headers.py COMPILER INCLUDE_DIRECTORY
"""

import concurrent.futures
import os
import subprocess
import sys

FLAGS = ["-std=c++20", "-Wall", "-Wextra", "-Wpedantic", "-Werror", "-fsyntax-only", "-x", "c++", "-"]


def compile_alone(compiler, include, header):
    line = "#include <%s>\n" % header
    run = subprocess.run([compiler, "-I" + include] + FLAGS, input=line + line, text=True,
                         capture_output=True, check=False)
    return header, run.returncode, run.stderr


def main():
    compiler, include = sys.argv[1:3]
    headers = [os.path.relpath(os.path.join(directory, name), include)
               for directory, _, names in os.walk(include) for name in names if name.endswith(".hpp")]
    if not headers:
        print("no headers under " + include)
        return 1
    failed = 0
    with concurrent.futures.ThreadPoolExecutor(2) as pool:
        for header, status, message in pool.map(
                lambda header: compile_alone(compiler, include, header), sorted(headers)):
            if status != 0:
                failed += 1
                print("%s does not compile alone:\n%s" % (header, message))
    print("%d headers, %d failed" % (len(headers), failed))
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())

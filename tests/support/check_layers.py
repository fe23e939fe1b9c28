#!/usr/bin/python3
"""Keeps the arrows between the rooms pointing one way.

  check_layers.py SOURCE_DIRECTORY    checks the tree, prints every breach, exit status 1 if any
  check_layers.py --self-test         breaks every rule in a made-up tree and sees it caught

Rules: which room may include which; no include cycles; Ceres behind one door; the library does not print, exit or use functions that are not safe in threads;
softsill_room(... USES ...) in the CMakeLists follows the same arrows.
"""

import os
import re
import sys
import tempfile

# What each room may use beside itself. "values" know nothing of recordings, models or trains:
# headers without a room, and the small rooms random and files.
MAY_USE = {
    "values": set(),
    "metrics": {"values"},
    "recording": {"values"},
    "model": {"values"},
    "fit": {"model", "recording", "values"},
    "study": {"fit", "model", "recording", "metrics", "values"},
    "report": {"study", "fit", "model", "recording", "metrics", "values"},
    "cli": {"report", "study", "fit", "model", "recording", "metrics", "values"},
}

# Which room answers for which public header. A new header must be added here.
PUBLIC_HEADERS = {
    "error.hpp": "values",
    "files.hpp": "values",
    "nearest_word.hpp": "values",
    "random.hpp": "values",
    "quality.hpp": "recording",
    "recording.hpp": "recording",
    "sheet.hpp": "recording",
    "spike_detection.hpp": "recording",
    "equations.hpp": "model",
    "escape.hpp": "model",
    "kernel.hpp": "model",
    "model.hpp": "model",
    "model_file.hpp": "model",
    "simulation.hpp": "model",
    "variant.hpp": "model",
    "estimate.hpp": "fit",
    "fit.hpp": "fit",
}

# Link targets that are not called like their room; metrics has one target per folder.
ROOM_OF_TARGET = {"random": "values", "files": "values"}

CERES_DOOR = "estimator/fit/ceres_minimizer.cpp"

# Outside estimator/cli.
BANNED = {
    r"\blgamma\b": "std::lgamma writes a global sign and is not safe in threads",
    r"\bstd::cout\b|\bstd::cerr\b|\bstd::clog\b": "the library does not print",
    r"(?<!\w)(?:std::)?(?:f|v|vf)?printf\s*\(|(?<!\w)(?:std::)?f?puts\s*\(": "the library does not print",
    r"(?<!\w)(?:std::)?(?:_|quick_)?exit\s*\(|\babort\s*\(": "the library does not end the program",
    r"(?<!\w)(?:std::)?s?rand\s*\(": "random numbers come from softsill/random.hpp",
}


def code_only(text):
    """Comments and the insides of strings blanked out, line numbers kept."""
    pattern = re.compile(r'//[^\n]*|/\*.*?\*/|"(?:\\.|[^"\\\n])*"', re.DOTALL)

    def blank(match):
        found = match.group(0)
        return '""' if found[0] == '"' else re.sub(r"[^\n]", " ", found)

    return pattern.sub(blank, text)


def sources(root):
    for top in ("include", "estimator", "metrics"):
        for directory, folders, names in os.walk(os.path.join(root, top)):
            folders.sort()
            for name in sorted(names):
                if name.endswith((".hpp", ".cpp")):
                    yield os.path.relpath(os.path.join(directory, name), root).replace(os.sep, "/")


def room_of(path):
    """Room of a file, or None for a public header that the table does not know."""
    parts = path.split("/")
    if parts[0] == "metrics":
        return "metrics"
    if parts[0] == "estimator":
        return parts[1]
    if parts[:2] == ["include", "softsill"]:
        return "metrics" if parts[2] == "metrics" else PUBLIC_HEADERS.get(parts[2])
    return None


def target_of(include, quoted):
    """Path inside the tree that an include names, or None for everything from outside."""
    if include.startswith("softsill/"):
        return "include/" + include
    if quoted and include.startswith(("estimator/", "metrics/")):
        return include
    return None


def cycles(graph):
    found, state, trail = [], {}, []

    def visit(node):
        state[node] = 1
        trail.append(node)
        for follower in sorted(graph.get(node, ())):
            if state.get(follower) == 1:
                found.append(trail[trail.index(follower):] + [follower])
            elif follower not in state:
                visit(follower)
        trail.pop()
        state[node] = 2

    for node in sorted(graph):
        if node not in state:
            visit(node)
    return found


def check_cmake(root):
    breaches = []
    for top in ("estimator", "metrics"):
        for directory, _, names in os.walk(os.path.join(root, top)):
            if "CMakeLists.txt" not in names:
                continue
            path = os.path.relpath(os.path.join(directory, "CMakeLists.txt"), root)
            with open(os.path.join(root, path), encoding="utf-8") as file:
                text = re.sub(r"#[^\n]*", "", file.read())
            for body in re.findall(r"softsill_room\s*\(([^)]*)\)", text):
                words = body.split()
                room = room_of(path.replace(os.sep, "/"))
                uses = re.search(r"\bUSES\b(.*?)(?:\b(?:SOURCES|LIBRARIES)\b|$)", body, re.DOTALL)
                for used in re.findall(r"softsill(?:_|::)(\w+)", uses.group(1) if uses else ""):
                    other = ROOM_OF_TARGET.get(used, used if used in MAY_USE else "metrics")
                    if other != room and other not in MAY_USE[room]:
                        breaches.append("%s: room %s links %s, against the arrows" % (
                            path, words[0], used))
    return breaches


def check(root):
    breaches = []
    graph = {}
    for path in sources(root):
        with open(os.path.join(root, path), encoding="utf-8") as file:
            text = file.read()
        room = room_of(path)
        if room is None:
            breaches.append("%s: name its room in PUBLIC_HEADERS of check_layers.py" % path)
            continue
        if room not in MAY_USE:
            breaches.append("%s: room '%s' is not known to check_layers.py" % (path, room))
            continue
        for number, line in enumerate(text.split("\n"), 1):
            match = re.match(r'\s*#\s*include\s*([<"])([^>"]+)[>"]', line)
            if not match:
                continue
            include, quoted = match.group(2), match.group(1) == '"'
            where = "%s:%d" % (path, number)
            if include.startswith("ceres/") and path != CERES_DOOR:
                breaches.append("%s: only %s may include Ceres" % (where, CERES_DOOR))
            target = target_of(include, quoted)
            if target is None:
                if quoted:
                    breaches.append('%s: "%s" is not a path from the top' % (where, include))
                continue
            graph.setdefault(path, set()).add(target)
            other = room_of(target)
            if other is not None and other != room and other not in MAY_USE[room]:
                breaches.append("%s: room %s must not use room %s (%s)" % (
                    where, room, other, include))
        if room != "cli":
            for number, line in enumerate(code_only(text).split("\n"), 1):
                for pattern, why in BANNED.items():
                    if re.search(pattern, line):
                        breaches.append("%s:%d: %s" % (path, number, why))
    for cycle in cycles(graph):
        breaches.append("include cycle: " + " -> ".join(cycle))
    return breaches + check_cmake(root)


def self_test():
    """Each file breaks one rule; the expected words must be among the breaches, and no others."""
    broken = {
        "include/softsill/kernel.hpp": ("", None),
        "include/softsill/newcomer.hpp": ("", "newcomer.hpp: name its room"),
        "estimator/model/a.cpp": ("#include <softsill/recording.hpp>\n", "model must not use room recording"),
        "estimator/model/b.cpp": ('#include "estimator/fit/x.hpp"\n', "model must not use room fit"),
        "estimator/model/c.cpp": ('#include "neighbour.hpp"\n', "not a path from the top"),
        "estimator/model/d.cpp": ("double f() { return std::lgamma(2.0); }\n", "lgamma"),
        "estimator/fit/e.cpp": ("#include <ceres/ceres.h>\n", "may include Ceres"),
        "estimator/fit/f.cpp": ("void f() { std::printf(\"\"); }\n", "f.cpp:1: the library does not print"),
        "estimator/fit/g.cpp": ("void g() { exit(1); }\n", "does not end the program"),
        "estimator/fit/h.cpp": ("int h() { return rand(); }\n", "softsill/random.hpp"),
        "estimator/fit/i.hpp": ('#include "estimator/fit/j.hpp"\n', "include cycle"),
        "estimator/fit/j.hpp": ('#include "estimator/fit/i.hpp"\n', None),
        "estimator/cli/k.cpp": ("int main() { printf(\"\"); exit(0); }\n", None),
        "estimator/fit/l.cpp": ('// printf( exit(\nvoid l() { snprintf(0, 0, "printf("); }\n', None),
        "metrics/trains/m.cpp": ('#include "softsill/model.hpp"\n', "metrics must not use room model"),
        "estimator/model/CMakeLists.txt": ("softsill_room(model\n SOURCES a.cpp USES softsill_fit)\n",
                                           "links fit, against the arrows"),
        "estimator/fit/CMakeLists.txt": ("softsill_room(fit\n SOURCES a.cpp USES softsill_model)\n", None),
    }
    with tempfile.TemporaryDirectory() as root:
        for path, (text, _) in broken.items():
            os.makedirs(os.path.dirname(os.path.join(root, path)), exist_ok=True)
            with open(os.path.join(root, path), "w", encoding="utf-8") as file:
                file.write(text)
        breaches = check(root)
    expected = [words for _, words in broken.values() if words]
    missed = [words for words in expected if not any(words in breach for breach in breaches)]
    for words in missed:
        print("not caught: " + words)
    if len(breaches) != len(expected):
        print("%d breaches, %d expected:\n%s" % (len(breaches), len(expected), "\n".join(breaches)))
    return 1 if missed or len(breaches) != len(expected) else 0


def main():
    if sys.argv[1:] == ["--self-test"]:
        return self_test()
    breaches = check(sys.argv[1])
    for breach in breaches:
        print(breach)
    return 1 if breaches else 0


if __name__ == "__main__":
    sys.exit(main())

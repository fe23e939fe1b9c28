"""Bad data: every mistake has its own message that names file and place, exit status 1, and leaves
nothing behind."""

import gzip
import os
import random
import resource
import tempfile
import time
import unittest

from program import run

ROWS = 20000
STEP = 0.1


def sheet(recording="a.csv", spikes="spikes.csv", more=""):
    return ('[[sweep]]\nname = "s1"\nrecording = "%s"\n' % recording
            + ('spikes = "%s"\n' % spikes if spikes else "") + more)


def table(columns="time_ms,current_nA", rows=ROWS, row=None):
    """A recording of 2 s whose current is noise; row(i) may return another text for row i."""
    generator = random.Random(5)
    lines = [columns]
    for i in range(rows):
        own = row(i) if row else None
        current = generator.gauss(0.1, 0.1)
        lines.append("%.1f,%.4f" % (STEP * i, current) if own is None else own)
    return "\n".join(lines) + "\n"


def with_voltage(low=-1e9, high=1e9, spikes=True):
    generator = random.Random(6)
    lines = ["time_ms,current_nA,voltage_mV"]
    voltage = 0.0
    for i in range(ROWS):
        current = generator.gauss(0.1, 0.1)
        voltage += -0.02 * voltage + generator.gauss(0.0, 0.5)
        shown = -65.0 + voltage
        if spikes and i % 1000 in (500, 501, 502):
            shown = 20.0 + generator.gauss(0.0, 3.0)
        lines.append("%.1f,%.4f,%.3f" % (STEP * i, current, min(high, max(low, shown))))
    return "\n".join(lines) + "\n"


GOOD_SPIKES = "spike_ms\n" + "".join("%.1f\n" % (50 + 97 * k) for k in range(20))

# name: (files, words of the message; the first one is file and place)
UNREADABLE = {
    "missing_sheet": ({}, ["cell.toml: there is no such file"]),
    "missing_recording": ({"cell.toml": sheet(recording="none.csv")},
                          ["none.csv: there is no such file"]),
    "missing_spikes": ({"cell.toml": sheet(spikes="none.csv")}, ["none.csv: there is no such file"]),
    "wrong_header": ({"a.csv": table("time_ms,curent_nA")},
                     ["a.csv: line 1: unknown column 'curent_nA'", "did you mean current_nA?"]),
    "header_missing": ({"a.csv": "0,1\n1,2\n"}, ["a.csv: line 1: starts with numbers"]),
    "non_uniform_time": ({"a.csv": table(row=lambda i: "%.1f,0.5" % (STEP * i + 0.1)
                                         if i >= 700 else None)},
                         ["a.csv: line 702, column time_ms: sampling is not uniform"]),
    "nan": ({"a.csv": table(row=lambda i: "100.0,nan" if i == 1000 else None)},
            ["a.csv: line 1002, column current_nA: 'nan' is not a finite number"]),
    "text_in_a_number": ({"a.csv": table(row=lambda i: "100.0,0.1O" if i == 1000 else None)},
                         ["a.csv: line 1002, column current_nA: '0.1O' is not a number"]),
    "mismatched_lengths": ({"a.csv": table(row=lambda i: "100.0" if i == 1000 else None)},
                           ["a.csv: line 1002: has 1 value where the header names 2"]),
    "empty_recording": ({"a.csv": ""}, ["a.csv: is empty"]),
    "empty_sheet": ({"cell.toml": ""}, ["cell.toml: is empty"]),
    "empty_spikes": ({"spikes.csv": ""}, ["spikes.csv: is empty"]),
    "no_samples": ({"a.csv": "time_ms,current_nA\n"}, ["a.csv: holds a header but no samples"]),
    "spikes_unsorted": ({"spikes.csv": "spike_ms\n50\n70\n60\n"},
                        ["spikes.csv: line 4: spikes are not sorted: 60 ms follows 70 ms"]),
    "spikes_doubled": ({"spikes.csv": "spike_ms\n50\n50\n"},
                       ["spikes.csv: line 3: the spike at 50 ms is listed twice"]),
    "spikes_outside": ({"spikes.csv": "spike_ms\n50\n2000\n"},
                       ["spikes.csv: line 3: the spike at 2000 ms lies outside the sweep",
                        "(0 to 2000 ms)"]),
    "unknown_key": ({"cell.toml": sheet(more='repeat = "x"\n')},
                    ["cell.toml: line 5: unknown key 'sweep.repeat'", "did you mean repeats?"]),
    "not_toml": ({"cell.toml": "[[sweep]\n"}, ["cell.toml: line 1: is not valid TOML"]),
    "no_spikes_no_voltage": ({"cell.toml": sheet(spikes=None)},
                             ["cell.toml: line 1, sweep 's1': has neither spikes nor a recorded"]),
    "truncated_gzip": ({"cell.toml": sheet(recording="a.csv.gz"),
                        "a.csv.gz": gzip.compress(table().encode())[:-100]},
                       ["a.csv.gz: ends in the middle of its gzip data"]),
}

# Can be read, so that check describes it; but no fit means anything.
UNFITTABLE = {
    "no_spikes": ({"spikes.csv": "spike_ms\n"},
                  ["cell.toml: there are no spikes in the sweeps to estimate from"]),
    "no_spikes_detected": ({"cell.toml": sheet(spikes=None), "a.csv": with_voltage(spikes=False)},
                           ["cell.toml: there are no spikes", "upward crossing of -20 mV"]),
    "one_spike": ({"spikes.csv": "spike_ms\n50\n"},
                  ["cell.toml: there is only one spike in the sweeps to estimate from"]),
    "constant_current": ({"a.csv": table(row=lambda i: "%.1f,0.25" % (STEP * i))},
                         ["cell.toml: the driving signal is constant"]),
    "clipped_voltage": ({"cell.toml": sheet(spikes=None), "a.csv": with_voltage(low=-66.0)},
                        ["cell.toml: sweep 's1': the potential is clipped between -66"]),
    "nothing_to_estimate": ({"cell.toml": sheet(more='use = "predict"\n')},
                            ["cell.toml: no sweep is there to estimate from"]),
}


class BadInput(unittest.TestCase):
    def setUp(self):
        self.folder = tempfile.TemporaryDirectory()
        self.addCleanup(self.folder.cleanup)

    def path(self, name):
        return os.path.join(self.folder.name, name)

    def write(self, files):
        for name in os.listdir(self.folder.name):
            os.remove(self.path(name))
        for name, content in files.items():
            if isinstance(content, str):
                content = content.encode()
            with open(self.path(name), "wb") as file:
                file.write(content)

    def refused(self, words, *command, **options):
        result = run(*command, **options)
        self.assertEqual(result.returncode, 1, result.stderr)
        self.assertEqual(result.stderr.count("\n"), 1, result.stderr)
        first = "softsill: " + self.path(words[0])
        self.assertTrue(result.stderr.startswith(first), result.stderr)
        for word in words[1:]:
            self.assertIn(word, result.stderr)
        return result

    def files_for(self, files):
        complete = {"cell.toml": sheet(), "a.csv": table(), "spikes.csv": GOOD_SPIKES}
        complete.update(files)
        return complete if files else {}

    def test_what_cannot_be_read(self):
        messages = set()
        for name, (files, words) in UNREADABLE.items():
            with self.subTest(name):
                self.write(self.files_for(files))
                for command in (("check",), ("fit", "--out", self.path("out"))):
                    result = self.refused(words, command[0], self.path("cell.toml"), *command[1:])
                    self.assertEqual(result.stdout, "")
                self.assertFalse(os.path.exists(self.path("out")))
                messages.add(words[0])
        self.assertGreaterEqual(len(messages), len(UNREADABLE) - 1)

    def test_what_cannot_be_fitted(self):
        for name, (files, words) in UNFITTABLE.items():
            with self.subTest(name):
                self.write(self.files_for(files))
                result = run("check", self.path("cell.toml"))
                self.assertEqual(result.returncode, 0, result.stderr)
                self.assertRegex(result.stdout, r"(?m)^  stop  ")
                self.refused(words, "fit", self.path("cell.toml"), "--out",
                             os.path.join(self.folder.name, "..", "unused-" + name))

    def test_the_good_files_are_good(self):
        self.write(self.files_for({"cell.toml": sheet()}))
        result = run("check", self.path("cell.toml"))
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertNotIn("\n  stop  ", result.stdout)

    def test_files_full_of_holes_are_refused_at_once_and_with_little_memory(self):
        def limit():
            resource.setrlimit(resource.RLIMIT_AS, (1 << 29, 1 << 29))

        npy = b"\x93NUMPY\x01\x00" + (118).to_bytes(2, "little")
        cases = {
            "all_holes": ("a.csv", b"", ["a.csv: line 1: holds NUL bytes"]),
            "after_a_header": ("a.csv", b"time_ms,current_nA\n", ["a.csv: line 2", "NUL bytes"]),
            "after_some_rows": ("a.csv", table(rows=5000).encode(), ["a.csv: line 5002", "NUL bytes"]),
            "array": ("a.npy", npy + b"{'descr': '<f8', 'fortran_order': False, 'shape': (9, 2)}"
                      .ljust(117) + b"\n", ["a.npy: holds 10737418240 bytes"]),
            "huge_array": ("a.npy", npy + b"{'descr': '<f8', 'fortran_order': False, "
                           b"'shape': (500000000, 2)}".ljust(117) + b"\n",
                           ["a.npy: NPY header: announces 500000000 samples"]),
            "spikes": ("spikes.csv", b"spike_ms\n", ["spikes.csv: line 2", "NUL bytes"]),
            "sheet": ("cell.toml", b"", ["cell.toml: is 10737418240 bytes long"]),
        }
        for name, (file_name, start, words) in cases.items():
            with self.subTest(name):
                recording = file_name if file_name.startswith("a.") else "a.csv"
                files = self.files_for({"cell.toml": sheet(recording=recording)})
                files[file_name] = start
                self.write(files)
                os.truncate(self.path(file_name), 10 << 30)
                begin = time.monotonic()
                self.refused(words, "check", self.path("cell.toml"), preexec_fn=limit)
                # Reading 10 GB would take many seconds.
                self.assertLess(time.monotonic() - begin, 5.0)

    def test_repeats_that_differ_are_an_error_for_fit_and_a_finding_for_check(self):
        other = table(row=lambda i: "%.1f,0.9" % (STEP * i) if i >= 1234 else None)
        more = ('repeats = "f"\n[[sweep]]\nname = "s2"\nrecording = "b.csv"\n'
                'spikes = "spikes.csv"\nrepeats = "f"\n')
        self.write(self.files_for({"cell.toml": sheet(more=more), "b.csv": other}))
        self.refused(["cell.toml: sweeps 's1' and 's2' are marked as repeats", "from 123.4 ms"],
                     "fit", self.path("cell.toml"), "--out", self.path("out"))
        result = run("check", self.path("cell.toml"))
        self.assertEqual(result.returncode, 0, result.stderr)
        self.assertRegex(result.stdout, r"(?m)^  stop  s2, repeats: sweeps 's1' and 's2'")


if __name__ == "__main__":
    unittest.main()

// Arrays are written by NumPy itself (Debian's python3-numpy) while the test runs.

#include <gmock/gmock.h>

#include <cmath>
#include <cstring>

#include "softsill/sheet.hpp"
#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::HasSubstr;

class Npy : public test::Scratch {
 protected:
  /// Runs Python with numpy as np, the arrays t, i, v of 20000 samples, and save(name, array).
  void numpy(const std::string& code) const {
    const std::string script =
        "import os, numpy as np\n"
        "from numpy.lib import format\n"
        "os.chdir(os.path.dirname(os.path.abspath(__file__)))\n"
        "n = 20000\n"
        "t = 100 + 0.05 * np.arange(n)\n"
        "i = np.sin(np.arange(n) / 50.0)\n"
        "v = -65 + np.cos(np.arange(n) / 70.0)\n"
        "table = np.column_stack([t, i, v])\n"
        "def save(name, array, version=None):\n"
        "    with open(name, 'wb') as file:\n"
        "        format.write_array(file, array, version=version)\n" +
        code + "\n";
    const std::string command = std::string(SYSTEM_PYTHON) + " -B " + write("make.py", script);
    ASSERT_EQ(std::system(command.c_str()), 0) << "this test needs Debian's python3-numpy";
  }

  void expect_table(const Sweep& sweep, double tolerance) const {
    ASSERT_EQ(sweep.input.size(), 20000u);
    ASSERT_EQ(sweep.voltage_mV.size(), 20000u);
    EXPECT_EQ(sweep.start_ms, 100.0);
    EXPECT_NEAR(sweep.step_ms, 0.05, 1e-12);
    for (std::size_t k = 0; k < sweep.input.size(); ++k) {
      ASSERT_NEAR(sweep.input[k], std::sin(static_cast<double>(k) / 50.0), tolerance) << k;
      ASSERT_NEAR(sweep.voltage_mV[k], -65.0 + std::cos(static_cast<double>(k) / 70.0),
                  70.0 * tolerance)
          << k;
    }
  }
};

TEST_F(Npy, reads_what_numpy_writes_in_every_order_width_and_version) {
  numpy(
      "for order in 'CF':\n"
      "    for kind in ('<f4', '<f8'):\n"
      "        for version in ((1, 0), (2, 0), (3, 0)):\n"
      "            array = np.array(table, dtype=kind, order=order)\n"
      "            save('%s_%s_%d.npy' % (order, kind[1:], version[0]), array, version)\n");
  for (const char* order : {"C", "F"}) {
    for (const char* kind : {"f4", "f8"}) {
      for (const char* version : {"1", "2", "3"}) {
        const std::string name = std::string(order) + "_" + kind + "_" + version + ".npy";
        SCOPED_TRACE(name);
        expect_table(read_recording_file(path(name)), kind[1] == '4' ? 1e-7 : 1e-13);
      }
    }
  }
}

TEST_F(Npy, reads_gzipped_arrays) {
  numpy(
      "import gzip\n"
      "np.save('a.npy', table)\n"
      "gzip.open('a.npy.gz', 'wb').write(open('a.npy', 'rb').read())\n"
      "gzip.open('cut.npy.gz', 'wb').write(open('a.npy', 'rb').read()[:-9])\n");
  expect_table(read_recording_file(path("a.npy.gz")), 1e-13);
  EXPECT_THAT(error_of([&] { read_recording_file(path("cut.npy.gz")); }),
              HasSubstr("element 59998: the array is cut short"));
}

TEST_F(Npy, without_times_takes_the_sampling_interval) {
  numpy(
      "np.save('flat.npy', i)\n"
      "np.save('one.npy', i[:, None])\n"
      "np.save('two.npy', np.column_stack([i, v]))\n"
      "np.save('three.npy', table)\n");
  for (const char* name : {"flat.npy", "one.npy"}) {
    const Sweep sweep = read_recording_file(path(name), "", 0.1);
    EXPECT_EQ(sweep.input.size(), 20000u);
    EXPECT_DOUBLE_EQ(sweep.input[50], std::sin(1.0));
    EXPECT_FALSE(sweep.has_voltage());
    EXPECT_EQ(sweep.step_ms, 0.1);
    EXPECT_EQ(sweep.start_ms, 0.0);
    EXPECT_THAT(error_of([&] { read_recording_file(path(name)); }), HasSubstr("give sampling_ms"));
  }
  const Sweep two = read_recording_file(path("two.npy"), "", 0.1);
  EXPECT_DOUBLE_EQ(two.voltage_mV[70], -65.0 + std::cos(1.0));
  const Sweep three = read_recording_file(path("three.npy"), "", 0.05);
  EXPECT_EQ(three.start_ms, 100.0);
  EXPECT_THAT(error_of([&] { read_recording_file(path("three.npy"), "", 0.1); }),
              HasSubstr("does not agree with sampling_ms"));
  EXPECT_THAT(error_of([&] { read_recording_file(path("two.npy")); }),
              HasSubstr("column time_ms: sampling is not uniform"));
}

TEST_F(Npy, reads_lists_of_spikes) {
  numpy(
      "np.save('s.npy', np.array([101.5, 110.25], dtype='<f4'))\n"
      "np.save('table.npy', table)\n"
      "np.save('bad.npy', np.array([5.0, 4.0]))\n");
  EXPECT_THAT(read_spike_file(path("s.npy"), 100, 200), ::testing::ElementsAre(101.5, 110.25));
  EXPECT_THAT(error_of([&] { read_spike_file(path("table.npy"), 0, 1e9); }),
              HasSubstr("plain list of numbers"));
  EXPECT_THAT(error_of([&] { read_spike_file(path("bad.npy"), 0, 10); }),
              HasSubstr("element 1: spikes are not sorted"));
}

TEST_F(Npy, refuses_what_it_cannot_read_with_a_reason) {
  numpy(
      "np.save('int.npy', np.arange(10))\n"
      "np.save('big.npy', table.astype('>f8'))\n"
      "np.save('complex.npy', table.astype(complex))\n"
      "np.save('turned.npy', table.T)\n"
      "np.save('wide.npy', np.zeros((100, 4)))\n"
      "np.save('cube.npy', np.zeros((10, 3, 2)))\n"
      "np.save('none.npy', np.zeros((0, 3)))\n"
      "np.save('single.npy', np.zeros((1, 3)))\n"
      "bad = table.copy(); bad[7, 2] = np.nan; np.save('nan.npy', bad)\n"
      "bad = table.copy(); bad[500:, 0] += 0.05; np.save('gap.npy', bad)\n"
      "np.save('whole.npy', table)\n"
      "open('cut.npy', 'wb').write(open('whole.npy', 'rb').read()[:-1])\n"
      "open('long.npy', 'wb').write(open('whole.npy', 'rb').read() + bytes(200000))\n"
      "open('start.npy', 'wb').write(open('whole.npy', 'rb').read()[:50])\n");
  const auto message = [&](const char* name) {
    return error_of([&] { read_recording_file(path(name)); });
  };
  EXPECT_THAT(message("int.npy"), HasSubstr("of type '<i8', not little-endian"));
  EXPECT_THAT(message("big.npy"), HasSubstr("of type '>f8', not little-endian"));
  EXPECT_THAT(message("complex.npy"), HasSubstr("not little-endian float32 or float64"));
  EXPECT_THAT(message("turned.npy"), HasSubstr("transpose the array"));
  EXPECT_THAT(message("wide.npy"), HasSubstr("announces 4 columns"));
  EXPECT_THAT(message("cube.npy"), HasSubstr("announces 3 dimensions"));
  EXPECT_THAT(message("none.npy"), HasSubstr("holds no samples"));
  EXPECT_THAT(message("single.npy"), HasSubstr("holds only one sample"));
  EXPECT_THAT(message("nan.npy"), HasSubstr("row 7, column voltage_mV: is not a finite number"));
  EXPECT_THAT(message("gap.npy"), HasSubstr("row 500, column time_ms: sampling is not uniform"));
  EXPECT_THAT(message("cut.npy"), HasSubstr("was not written or copied completely"));
  EXPECT_THAT(message("long.npy"), HasSubstr("where its header announces only"));
  EXPECT_THAT(message("start.npy"), HasSubstr("is cut short"));
}

TEST_F(Npy, refuses_damaged_headers) {
  const auto with_header = [&](const std::string& text) {
    std::string file = "\x93NUMPY";
    file += std::string("\x01\x00", 2);
    file += static_cast<char>(text.size() & 0xff);
    file += static_cast<char>(text.size() >> 8);
    return write("h.npy", file + text + std::string(160, '\0'));
  };
  const auto message = [&](const std::string& text) {
    return error_of([&] { read_recording_file(with_header(text)); });
  };
  EXPECT_EQ(message("{'descr': '<f8', 'fortran_order': False, 'shape': (10, 2), }").find("(no"),
            std::string::npos);  // ten zero times: refused, but not for its header
  EXPECT_THAT(message("{'fortran_order': False, 'shape': (10, 2), }"), HasSubstr("no descr"));
  EXPECT_THAT(message("{'descr': '<f8', 'shape': (10, 2), }"), HasSubstr("no fortran_order"));
  EXPECT_THAT(message("{'descr': '<f8', 'fortran_order': False}"), HasSubstr("no shape"));
  EXPECT_THAT(message("{'descr': '<f8', 'fortran_order': False, 'shape': (x, 2)}"),
              HasSubstr("no readable shape"));
  EXPECT_THAT(message("{'descr': '<f8', 'fortran_order': False, 'shape': (10, 2"),
              HasSubstr("no readable shape"));
  EXPECT_THAT(message("{'descr': '"), HasSubstr("of type"));
  // 2^63 rows must not be multiplied into something small.
  EXPECT_THAT(
      message("{'descr': '<f8', 'fortran_order': False, 'shape': (9223372036854775808, 2)}"),
      HasSubstr("more than 200000000"));
  EXPECT_THAT(
      message("{'descr': '<f8', 'fortran_order': False, 'shape': (99999999999999999999, 2)}"),
      HasSubstr("no readable shape"));
}

}  // namespace
}  // namespace softsill

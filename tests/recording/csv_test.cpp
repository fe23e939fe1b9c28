#include <gmock/gmock.h>
#include <zlib.h>

#include <cmath>
#include <limits>
#include <random>

#include "estimator/recording/csv_rows.hpp"
#include "softsill/sheet.hpp"
#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::ElementsAre;
using ::testing::EndsWith;
using ::testing::HasSubstr;
using ::testing::StartsWith;

double read(const std::string& text, int* decimals = nullptr) {
  double value = 0.0;
  int own = 0;
  const char* const end = text.data() + text.size();
  EXPECT_EQ(read_number(text.data(), end, value, decimals == nullptr ? own : *decimals), end)
      << text;
  return value;
}

TEST(ReadNumber, agrees_with_the_C_library_to_the_last_bit) {
  for (const char* text : {"0",
                           "-0",
                           "1",
                           "+1",
                           "-1.5",
                           ".5",
                           "5.",
                           "0.1",
                           "0.05",
                           "1e3",
                           "1E-3",
                           "-2.5e+7",
                           "1e22",
                           "1e23",
                           "123456789012345678",
                           "9007199254740993",
                           "0.30000000000000004",
                           "4.9e-324",
                           "1.7976931348623157e308",
                           "2.2250738585072011e-308",
                           "12345678901234567890123.0",
                           "0.1234567890123456789012345",
                           "00012.500"}) {
    EXPECT_EQ(read(text), std::strtod(text, nullptr)) << text;
  }
  std::mt19937_64 random(7);
  std::uniform_real_distribution<double> exponent(-30, 30);
  for (int i = 0; i < 20000; ++i) {
    const double value = std::pow(10.0, exponent(random)) * (random() % 2 == 0 ? 1 : -1);
    for (const char* format : {"%.17g", "%.6g", "%.3f", "%.10f", "%.9e"}) {
      char text[400];
      std::snprintf(text, sizeof text, format, value);
      EXPECT_EQ(read(text), std::strtod(text, nullptr)) << text;
    }
  }
}

TEST(ReadNumber, tells_how_finely_a_number_was_written) {
  int decimals = 0;
  read("12.50", &decimals);
  EXPECT_EQ(decimals, 2);
  read("7", &decimals);
  EXPECT_EQ(decimals, 0);
  read("5.0e-05", &decimals);
  EXPECT_EQ(decimals, 6);
  read("1e3", &decimals);
  EXPECT_EQ(decimals, -3);
}

TEST(ReadNumber, refuses_what_is_no_number) {
  for (const std::string text : {"", "abc", "-", "+", ".", "e5", "--1"}) {
    double value = 0.0;
    int decimals = 0;
    EXPECT_EQ(read_number(text.data(), text.data() + text.size(), value, decimals), nullptr)
        << text;
  }
}

class Csv : public test::Scratch {};

TEST_F(Csv, reads_units_by_column_name) {
  const Sweep plain = read_recording_file(
      write("a.csv", "time_ms,current_nA,voltage_mV\n0,0.25,-65\n0.1,-0.5,-64.5\n0.2,1,-64\n"));
  EXPECT_EQ(plain.step_ms, 0.1);
  EXPECT_EQ(plain.start_ms, 0.0);
  EXPECT_THAT(plain.input, ElementsAre(0.25, -0.5, 1.0));
  EXPECT_THAT(plain.voltage_mV, ElementsAre(-65.0, -64.5, -64.0));

  const Sweep scaled = read_recording_file(write(
      "b.csv",
      "time_s,current_pA,voltage_V\n0.0005,250,-0.065\n0.0006,-500,-0.0645\n0.0007,1000,-0.064"));
  EXPECT_EQ(scaled.step_ms, 0.1);
  EXPECT_EQ(scaled.start_ms, 0.5);
  EXPECT_THAT(scaled.input, ElementsAre(0.25, -0.5, 1.0));
  EXPECT_THAT(scaled.voltage_mV, ElementsAre(-65.0, -64.5, -64.0));

  const Sweep micro = read_recording_file(write("c.csv", "time_us,current_A\n50,1e-9\n100,2e-9\n"));
  EXPECT_EQ(micro.step_ms, 0.05);
  EXPECT_DOUBLE_EQ(micro.input[1], 2.0);
  EXPECT_FALSE(micro.has_voltage());
}

TEST_F(Csv, takes_columns_after_the_time_in_any_order) {
  const Sweep sweep = read_recording_file(
      write("a.csv", "time_ms,voltage_mV,current_nA\n0,-65,0.1\n0.1,-64,0.2\n"));
  EXPECT_THAT(sweep.input, ElementsAre(0.1, 0.2));
  EXPECT_THAT(sweep.voltage_mV, ElementsAre(-65.0, -64.0));
}

TEST_F(Csv, tolerates_how_programs_write_text) {
  const std::string body =
      "# made by hand\n\n#two\r\n\"time_ms\", current_nA\r\n0, 0.1\r\n"
      " 0.1 ,\t0.2\r\n# remark\r\n\r\n0.2,+0.3";
  for (const std::string& start : {std::string(), std::string("\xef\xbb\xbf")}) {
    const Sweep sweep = read_recording_file(write("a.csv", start + body));
    EXPECT_THAT(sweep.input, ElementsAre(0.1, 0.2, 0.3));
    EXPECT_EQ(sweep.step_ms, 0.1);
  }
}

TEST_F(Csv, reads_an_input_that_is_no_current) {
  const std::string path = write("a.csv", "time_ms,input\n0,3\n1,4\n");
  EXPECT_THAT(read_recording_file(path, "dB").input, ElementsAre(3.0, 4.0));
  EXPECT_THAT(error_of([&] { read_recording_file(path); }), HasSubstr("no input_unit"));
  const std::string current = write("b.csv", "time_ms,current_nA\n0,3\n1,4\n");
  EXPECT_THAT(error_of([&] { read_recording_file(current, "dB"); }),
              HasSubstr("call the driving signal input"));
}

TEST_F(Csv, without_times_needs_the_sampling_interval) {
  const std::string path = write("a.csv", "current_nA\n3\n4\n5\n");
  EXPECT_THAT(error_of([&] { read_recording_file(path); }),
              HasSubstr("line 1: has no column time_ms"));
  const Sweep sweep = read_recording_file(path, "", 0.05);
  EXPECT_EQ(sweep.step_ms, 0.05);
  EXPECT_EQ(sweep.start_ms, 0.0);
  EXPECT_EQ(sweep.input.size(), 3u);
}

TEST_F(Csv, coarse_times_are_settled_by_the_sampling_interval) {
  // Six significant digits, as many programs write them: from 10 s on a step of 0.05 is lost.
  std::string text = "time_ms,current_nA\n";
  for (int i = 0; i < 4000; ++i) {
    char row[64];
    std::snprintf(row, sizeof row, "%.6g,%d\n", 9900.0 + 0.05 * i, i);
    text += row;
  }
  const std::string path = write("a.csv", text);
  EXPECT_THAT(error_of([&] { read_recording_file(path); }),
              AllOf(HasSubstr("sampling is not uniform"), HasSubstr("sampling_ms")));
  const Sweep sweep = read_recording_file(path, "", 0.05);
  EXPECT_EQ(sweep.start_ms, 9900.0);
  EXPECT_EQ(sweep.step_ms, 0.05);
  EXPECT_THAT(error_of([&] { read_recording_file(path, "", 0.1); }),
              HasSubstr("correct sampling_ms"));
}

TEST_F(Csv, reads_gzip_in_one_or_several_members) {
  std::string text = "time_ms,current_nA\n";
  for (int i = 0; i < 50000; ++i) {
    text += std::to_string(i) + "," + std::to_string(i % 7) + "\n";
  }
  const std::string path = this->path("a.csv.gz");
  for (const char* mode : {"wb", "ab"}) {
    const gzFile file = gzopen(path.c_str(), mode);
    const std::size_t half = text.size() / 2 + 3;
    const std::string part = mode[0] == 'w' ? text.substr(0, half) : text.substr(half);
    ASSERT_EQ(gzwrite(file, part.data(), static_cast<unsigned>(part.size())),
              static_cast<int>(part.size()));
    ASSERT_EQ(gzclose(file), Z_OK);
  }
  const Sweep sweep = read_recording_file(path);
  ASSERT_EQ(sweep.input.size(), 50000u);
  EXPECT_EQ(sweep.input[49999], 49999 % 7);

  std::ifstream whole(path, std::ios::binary);
  const std::string packed((std::istreambuf_iterator<char>(whole)),
                           std::istreambuf_iterator<char>());
  EXPECT_THAT(error_of([&] {
                read_recording_file(write("cut.csv.gz", packed.substr(0, packed.size() - 20)));
              }),
              HasSubstr("in the middle of its gzip data"));
  std::string damaged = packed;
  damaged[200] = static_cast<char>(damaged[200] ^ 0x55);
  EXPECT_THAT(error_of([&] { read_recording_file(write("bad.csv.gz", damaged)); }),
              StartsWith(this->path("bad.csv.gz")));
}

TEST_F(Csv, rows_may_straddle_the_buffer) {
  // Longer than two buffers of 2^20 bytes; the row length divides neither.
  std::string text = "time_ms,current_nA\n";
  const std::size_t rows = 150000;
  for (std::size_t i = 0; i < rows; ++i) {
    char row[64];
    std::snprintf(row, sizeof row, "%.2f,%.7f\n", 0.05 * static_cast<double>(i),
                  static_cast<double>(i) * 1e-7);
    text += row;
  }
  ASSERT_GT(text.size(), std::size_t{1} << 21);
  const Sweep sweep = read_recording_file(write("a.csv", text));
  ASSERT_EQ(sweep.input.size(), rows);
  for (std::size_t i = 0; i < rows; ++i) {
    ASSERT_NEAR(sweep.input[i], static_cast<double>(i) * 1e-7, 1e-15);
  }
  EXPECT_EQ(sweep.step_ms, 0.05);
}

struct BadText {
  const char* name;
  std::string text;
  const char* message;
};

class BadCsv : public test::Scratch, public ::testing::WithParamInterface<BadText> {};

TEST_P(BadCsv, is_refused_with_its_place) {
  const std::string path = write("bad.csv", GetParam().text);
  const std::string message = error_of([&] { read_recording_file(path); });
  EXPECT_THAT(message, StartsWith(path + ": " + GetParam().message));
  EXPECT_EQ(message.find('\n'), std::string::npos);
}

const std::string head = "time_ms,current_nA\n0,1\n0.1,2\n";

INSTANTIATE_TEST_SUITE_P(
    Table, BadCsv,
    ::testing::Values(
        BadText{"empty", "", "is empty"},
        BadText{"only_comments", "# a\n# b\n", "holds no header line"},
        BadText{"only_header", "time_ms,current_nA\n", "holds a header but no samples"},
        BadText{"one_row", "time_ms,current_nA\n0,1\n", "holds only one sample"},
        BadText{"no_header", "0,1\n0.1,2\n", "line 1: starts with numbers instead of a header"},
        BadText{"wrong_header", "time_ms,currnet_nA\n0,1\n",
                "line 1: unknown column 'currnet_nA'; did you mean current_nA?"},
        BadText{"wrong_unit", "time_ms,current_nA,voltage_mv\n0,1,2\n",
                "line 1: unknown column 'voltage_mv'; did you mean voltage_mV?"},
        BadText{"no_current", "time_ms,voltage_mV\n0,1\n", "line 1: has no column current_nA"},
        BadText{"two_currents", "time_ms,current_nA,current_pA\n0,1,2\n",
                "line 1: names both current_nA and current_pA"},
        BadText{"time_not_first", "current_nA,time_ms\n0,1\n",
                "line 1: the time column is not the first"},
        BadText{"text", head + "0.2,fast\n", "line 4, column current_nA: 'fast' is not a number"},
        BadText{"half_number", head + "0.2,3x\n",
                "line 4, column current_nA: '3x' is not a number"},
        BadText{"comma_as_point", head + "0,2,3\n",
                "line 4: has 3 values where the header names 2"},
        BadText{"nan", head + "0.2,nan\n",
                "line 4, column current_nA: 'nan' is not a finite number"},
        BadText{"infinite", head + "0.2,-inf\n",
                "line 4, column current_nA: '-inf' is not a finite number"},
        BadText{"overflow", head + "0.2,1e999\n",
                "line 4, column current_nA: '1e999' is not a finite number"},
        BadText{"missing_value", head + "0.2,\n", "line 4, column current_nA: holds no value"},
        BadText{"too_few", head + "0.2\n", "line 4: has 1 value where the header names 2"},
        BadText{"gap", head + "0.3,1\n",
                "line 4, column time_ms: sampling is not uniform: 0.3 ms follows 0.1 ms"},
        BadText{"doubled_first", "time_ms,current_nA\n5.0,1\n5.0,2\n",
                "line 3, column time_ms: the time does not increase"},
        BadText{"doubled", head + "0.2,1\n0.2,1\n", "line 5, column time_ms: sampling is not"},
        BadText{"nul", head + std::string("0.2,1\0", 6) + "\n", "line 4"},
        BadText{"binary",
                std::string("\x7f"
                            "ELF\0\0\0\1\2\3\0\0",
                            12),
                "line 1: holds NUL bytes"},
        BadText{"endless_line", std::string(200000, 'x'), "line 1: is too long"}),
    [](const ::testing::TestParamInfo<BadText>& info) { return std::string(info.param.name); });

class SpikeFiles : public test::Scratch {};

TEST_F(SpikeFiles, are_read_in_their_units) {
  EXPECT_THAT(read_spike_file(write("a.csv", "spike_ms\n1.5\n20.25\n"), 0, 100),
              ElementsAre(1.5, 20.25));
  EXPECT_THAT(read_spike_file(write("b.csv", "# x\nspike_s\n0.0015\n"), 0, 100), ElementsAre(1.5));
  EXPECT_THAT(read_spike_file(write("c.csv", "spike_us\n1500\n"), 0, 100), ElementsAre(1.5));
  EXPECT_TRUE(read_spike_file(write("d.csv", "spike_ms\n"), 0, 100).empty());
}

TEST_F(SpikeFiles, are_refused_with_the_line) {
  const auto message = [&](const std::string& text) {
    return error_of([&] { read_spike_file(write("s.csv", text), 10, 100); });
  };
  EXPECT_THAT(message("spike_ms\n20\n19.5\n"),
              HasSubstr("line 3: spikes are not sorted: 19.5 ms follows 20 ms"));
  EXPECT_THAT(message("spike_ms\n20\n20\n"),
              HasSubstr("line 3: the spike at 20 ms is listed twice"));
  EXPECT_THAT(message("spike_ms\n9.9\n"),
              HasSubstr("line 2: the spike at 9.9 ms lies outside the sweep (10 to 100 ms)"));
  EXPECT_THAT(message("spike_ms\n100\n"), HasSubstr("lies outside"));
  EXPECT_THAT(message("spikes_ms\n20\n"), HasSubstr("did you mean spike_ms?"));
  EXPECT_THAT(message("spike_ms\nnan\n"), HasSubstr("not a finite number"));
  EXPECT_THAT(message(""), HasSubstr("is empty"));
}

}  // namespace
}  // namespace softsill

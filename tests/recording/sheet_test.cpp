#include "softsill/sheet.hpp"

#include <gmock/gmock.h>

#include "softsill/files.hpp"
#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::AllOf;
using ::testing::ElementsAre;
using ::testing::HasSubstr;
using ::testing::StartsWith;

class Sheet : public test::Scratch {
 protected:
  Sheet() {
    std::string with = "time_ms,current_nA,voltage_mV\n";
    std::string without = "time_ms,current_nA\n";
    for (int i = 0; i < 1000; ++i) {
      const std::string row = std::to_string(i) + "," + std::to_string((i * 37) % 11);
      // A spike of one sample at 100, 300, ...: -20 is crossed halfway between -60 and 20.
      with += row + (i % 200 == 100 ? ",20\n" : ",-60\n");
      without += row + "\n";
    }
    write("v.csv", with);
    write("i.csv", without);
    write("spikes.csv", "spike_ms\n50\n150.5\n950\n");
  }

  Recording read(const std::string& sheet) const { return read_cell_sheet(write("c.toml", sheet)); }
  std::string message(const std::string& sheet) const {
    return error_of([&] { read(sheet); });
  }
};

// The keys of the complete example in sheet.hpp.
TEST_F(Sheet, reads_every_key) {
  const Recording recording = read(R"(
cell = "H07"
series_resistance_MOhm = "fit"

[detection]
level_mV = -40
dead_time_ms = 2

[[sweep]]
name = "s1"
recording = "v.csv"
use = "estimate"
start_ms = 50
end_ms = 900.5
exclude = [[600, 650], [200, 300.5]]

[[sweep]]
name = "s2"
recording = "i.csv"
spikes = "spikes.csv"
use = "predict"
repeats = "frozen"
)");
  EXPECT_EQ(recording.cell, "H07");
  EXPECT_TRUE(recording.series_resistance.fit);
  EXPECT_TRUE(recording.input_is_current);
  EXPECT_EQ(recording.input_unit, "nA");
  EXPECT_EQ(recording.spike_detection, "upward crossing of -40 mV, dead time 2 ms");
  ASSERT_EQ(recording.sweeps.size(), 2u);
  const Sweep& first = recording.sweeps[0];
  EXPECT_EQ(first.name, "s1");
  EXPECT_EQ(first.use, Use::estimate);
  EXPECT_EQ(first.spike_origin, SpikeOrigin::detected);
  EXPECT_THAT(first.spikes_ms, ElementsAre(99.25, 299.25, 499.25, 699.25, 899.25));
  ASSERT_EQ(first.analysed.size(), 3u);
  EXPECT_EQ(first.analysed[0].begin_ms, 50);
  EXPECT_EQ(first.analysed[0].end_ms, 200);
  EXPECT_EQ(first.analysed[1].begin_ms, 300.5);
  EXPECT_EQ(first.analysed[1].end_ms, 600);
  EXPECT_EQ(first.analysed[2].begin_ms, 650);
  EXPECT_EQ(first.analysed[2].end_ms, 900.5);
  // 99.25 | 499.25 | 699.25, 899.25; the one at 299.25 is excluded.
  EXPECT_EQ(recording.spike_count(Use::estimate), 4u);
  const Sweep& second = recording.sweeps[1];
  EXPECT_EQ(second.use, Use::predict);
  EXPECT_EQ(second.repeats, "frozen");
  EXPECT_EQ(second.spike_origin, SpikeOrigin::given);
  EXPECT_THAT(second.spikes_ms, ElementsAre(50, 150.5, 950));
  ASSERT_EQ(second.analysed.size(), 1u);
  EXPECT_EQ(second.analysed[0].begin_ms, 0);
  EXPECT_EQ(second.analysed[0].end_ms, 1000);
  EXPECT_EQ(recording.spike_count(Use::predict), 3u);
  EXPECT_TRUE(recording.has_voltage());

  ASSERT_EQ(recording.files.size(), 4u);
  EXPECT_EQ(recording.files[0].path, path("c.toml"));
  EXPECT_EQ(recording.files[1].path, "v.csv");
  EXPECT_EQ(recording.files[2].path, "i.csv");
  EXPECT_EQ(recording.files[3].path, "spikes.csv");
  EXPECT_EQ(recording.files[0].sha256, sha256_of_file(path("c.toml")));
  EXPECT_EQ(recording.files[1].sha256, sha256_of_file(path("v.csv")));
  EXPECT_EQ(recording.files[3].sha256, sha256_of_file(path("spikes.csv")));
}

TEST_F(Sheet, has_defaults) {
  const Recording recording = read("[[sweep]]\nrecording = 'i.csv'\nspikes = 'spikes.csv'\n");
  EXPECT_EQ(recording.cell, "c");
  EXPECT_FALSE(recording.series_resistance.fit);
  EXPECT_EQ(recording.series_resistance.value_MOhm, 0.0);
  EXPECT_EQ(recording.sweeps[0].name, "sweep 1");
  EXPECT_EQ(recording.sweeps[0].use, Use::estimate);
  EXPECT_EQ(recording.spike_detection, "");
  EXPECT_FALSE(recording.has_voltage());
}

TEST_F(Sheet, reads_a_file_once_for_all_its_windows) {
  const Recording recording = read(
      "[[sweep]]\nname='a'\nrecording='v.csv'\nend_ms=500\n"
      "[[sweep]]\nname='b'\nrecording='v.csv'\nstart_ms=500\nuse='predict'\n");
  EXPECT_EQ(recording.files.size(), 2u);
  EXPECT_EQ(recording.sweeps[0].input, recording.sweeps[1].input);
  EXPECT_EQ(recording.sweeps[0].input.size(), 1000u);
  EXPECT_EQ(recording.spike_count(Use::estimate), 3u);
  EXPECT_EQ(recording.spike_count(Use::predict), 2u);
}

TEST_F(Sheet, names_no_current_for_an_input_that_is_none) {
  write("sound.csv", "time_ms,input\n0,1\n1,2\n2,4\n");
  write("s.csv", "spike_ms\n1.5\n");
  const Recording recording =
      read("input_unit = 'dB'\n[[sweep]]\nrecording='sound.csv'\nspikes='s.csv'\n");
  EXPECT_FALSE(recording.input_is_current);
  EXPECT_EQ(recording.input_unit, "dB");
  EXPECT_THAT(message("input_unit = 'pA'\n[[sweep]]\nrecording='i.csv'\n"),
              HasSubstr("line 1, input_unit: is the unit of a current"));
  EXPECT_THAT(message("input_unit='dB'\nseries_resistance_MOhm=5\n[[sweep]]\nrecording='i.csv'\n"),
              HasSubstr("line 2, series_resistance_MOhm: has no meaning"));
}

TEST_F(Sheet, detects_spikes_by_slope_on_request) {
  const Recording recording =
      read("detection.slope_mV_per_ms = 40\n[[sweep]]\nrecording = 'v.csv'\n");
  // Slopes are 0 at 98.5 ms and 80 at 99.5 ms.
  EXPECT_THAT(recording.sweeps[0].spikes_ms, ElementsAre(99.0, 299.0, 499.0, 699.0, 899.0));
  EXPECT_EQ(recording.spike_detection, "rate of rise crossing 40 mV/ms, dead time 1 ms");
}

TEST_F(Sheet, checks_that_repeats_share_their_input) {
  std::string other = "time_ms,current_nA\n";
  for (int i = 0; i < 1000; ++i) {
    other +=
        std::to_string(5000 + i) + "," + std::to_string((i * 37) % 11 + (i >= 700 ? 1 : 0)) + "\n";
  }
  write("other.csv", other);
  write("other_spikes.csv", "spike_ms\n5100\n");
  const std::string same =
      "[[sweep]]\nname='a'\nrecording='i.csv'\nspikes='spikes.csv'\nrepeats='f'\n";
  const std::string sheet =
      same + "[[sweep]]\nname='b'\nrecording='other.csv'\nspikes='other_spikes.csv'\nrepeats='f'\n";
  EXPECT_THAT(message(sheet), AllOf(HasSubstr("sweeps 'a' and 'b' are marked as repeats ('f')"),
                                    HasSubstr("differ from 700 ms after their start")));
  ReadOptions options;
  options.check_repeats = false;
  const Recording recording = read_cell_sheet(path("c.toml"), options);
  const std::vector<RepeatMismatch> mismatches = find_repeat_mismatches(recording);
  ASSERT_EQ(mismatches.size(), 1u);
  EXPECT_EQ(mismatches[0].differs_at_ms, 700.0);
  EXPECT_EQ(mismatches[0].other_sweep, 1u);

  write("short.csv", "time_ms,current_nA\n0,0\n1,4\n2,8\n");
  write("none.csv", "spike_ms\n");
  EXPECT_THAT(message(same + "[[sweep]]\nname='b'\nrecording='short.csv'\nspikes='none.csv'\n"
                             "repeats='f'\n"),
              HasSubstr("have different lengths (1000 and 3 samples)"));
  write("slow.csv", "time_ms,current_nA\n0,0\n2,4\n4,8\n");
  EXPECT_THAT(message(same + "[[sweep]]\nname='b'\nrecording='slow.csv'\nspikes='none.csv'\n"
                             "repeats='f'\n"),
              HasSubstr("are sampled every 1 and 2 ms"));
  EXPECT_NO_THROW(read(same + "[[sweep]]\nname='b'\nrecording='i.csv'\nspikes='spikes.csv'\n"
                              "repeats='f'\n"));
}

TEST_F(Sheet, keeps_held_out_data_out_of_the_estimate) {
  const std::string a = "[[sweep]]\nname='a'\nrecording='v.csv'\nend_ms=600\n";
  EXPECT_THAT(
      message(a + "[[sweep]]\nname='b'\nrecording='v.csv'\nstart_ms=500\nuse='predict'\n"),
      AllOf(HasSubstr("line 5, sweep 'b': estimates and predicts the same data as sweep 'a'"),
            HasSubstr("500 to 600 ms of v.csv")));
  // The same current with other spikes is another trial.
  write("trial2.csv", "spike_ms\n60\n");
  EXPECT_NO_THROW(
      read("[[sweep]]\nname='a'\nrecording='i.csv'\nspikes='spikes.csv'\n"
           "[[sweep]]\nname='b'\nrecording='i.csv'\nspikes='trial2.csv'\nuse='predict'\n"));
}

struct BadSheet {
  const char* name;
  const char* text;
  const char* message;
};

class BadSheets : public Sheet, public ::testing::WithParamInterface<BadSheet> {};

TEST_P(BadSheets, are_refused_with_the_line) {
  const std::string text = message(GetParam().text);
  EXPECT_THAT(text, StartsWith(path("c.toml") + ": " + GetParam().message));
  EXPECT_EQ(text.find('\n'), std::string::npos);
}

#define SWEEP "[[sweep]]\nname = 'a'\nrecording = 'v.csv'\n"

INSTANTIATE_TEST_SUITE_P(
    Table, BadSheets,
    ::testing::Values(
        BadSheet{"empty", "", "is empty"}, BadSheet{"no_sweep", "cell = 'x'\n", "names no sweeps"},
        BadSheet{"not_toml", "cell = \n", "line 1: is not valid TOML"},
        BadSheet{"unknown_top", "cel = 'x'\n" SWEEP,
                 "line 1: unknown key 'cel'; did you mean cell?"},
        BadSheet{"unknown_in_sweep", SWEEP "spike = 's.csv'\n",
                 "line 4: unknown key 'sweep.spike'; did you mean spikes?"},
        BadSheet{"unknown_in_detection", "[detection]\nlevel = 3\n" SWEEP,
                 "line 2: unknown key 'detection.level'; did you mean level_mV?"},
        BadSheet{"detection_no_table", "detection = 3\n" SWEEP,
                 "line 1, detection: is not a table"},
        BadSheet{"sweep_no_list", "[sweep]\nname = 'a'\n",
                 "line 1, sweep: is not a list of tables"},
        BadSheet{"no_recording", "cell = 'x'\n[[sweep]]\nname = 'a'\n",
                 "line 2: the key 'sweep.recording' is missing"},
        BadSheet{"text_for_number", SWEEP "start_ms = '3'\n",
                 "line 4, sweep.start_ms: is not a finite number"},
        BadSheet{"nan_for_number", SWEEP "end_ms = nan\n",
                 "line 4, sweep.end_ms: is not a finite number"},
        BadSheet{"number_for_text", "cell = 3\n" SWEEP, "line 1, cell: is not a text in quotes"},
        BadSheet{"empty_text", "cell = ''\n" SWEEP, "line 1, cell: is an empty text"},
        BadSheet{"unknown_use", SWEEP "use = 'estimat'\n",
                 "line 4, sweep.use: unknown word 'estimat'; did you mean estimate?"},
        BadSheet{"control_characters", SWEEP "use = \"a\\nb\"\n",
                 "line 4, sweep.use: unknown word 'a?b'"},
        BadSheet{"same_name", SWEEP SWEEP, "line 4: a second sweep is called 'a'"},
        BadSheet{"backward_window", SWEEP "start_ms = 5\nend_ms = 5\n",
                 "line 5, sweep.end_ms: does not come after start_ms"},
        BadSheet{"window_outside", SWEEP "end_ms = 2000\n",
                 "line 1, sweep 'a': end_ms = 2000 lies outside the recording (0 to 1000 ms)"},
        BadSheet{"exclude_no_list", SWEEP "exclude = 5\n", "line 4, sweep.exclude: is not a list"},
        BadSheet{"exclude_no_pairs", SWEEP "exclude = [5, 6]\n",
                 "line 4, sweep.exclude: holds something else than a pair"},
        BadSheet{"exclude_backward", SWEEP "exclude = [[6, 5]]\n",
                 "line 4, sweep.exclude: holds a pair that does not go forwards"},
        BadSheet{"exclude_outside", SWEEP "exclude = [[1000, 1001]]\n",
                 "line 1, sweep 'a': exclude = [1000, 1001] lies outside"},
        BadSheet{"exclude_all", SWEEP "exclude = [[0, 600], [500, 1000]]\n",
                 "line 1, sweep 'a': nothing is left to analyse"},
        BadSheet{"bad_sampling", SWEEP "sampling_ms = 0\n",
                 "line 4, sweep.sampling_ms: is not positive"},
        BadSheet{"bad_resistance", "series_resistance_MOhm = 'fitt'\n" SWEEP,
                 "line 1, series_resistance_MOhm: is neither a number nor \"fit\""},
        BadSheet{"negative_resistance", "series_resistance_MOhm = -1\n" SWEEP,
                 "line 1, series_resistance_MOhm: is negative"},
        BadSheet{"two_criteria", "[detection]\nlevel_mV = 0\nslope_mV_per_ms = 10\n" SWEEP,
                 "line 3, detection.slope_mV_per_ms: stands beside level_mV"},
        BadSheet{"negative_dead_time", "[detection]\ndead_time_ms = -1\n" SWEEP,
                 "line 2, detection.dead_time_ms: is negative"},
        BadSheet{"no_spikes_at_all", "[[sweep]]\nname = 'a'\nrecording = 'i.csv'\n",
                 "line 1, sweep 'a': has neither spikes nor a recorded potential"}),
    [](const ::testing::TestParamInfo<BadSheet>& info) { return std::string(info.param.name); });

TEST_F(Sheet, refuses_missing_files_by_name) {
  EXPECT_THAT(error_of([&] { read_cell_sheet(path("none.toml")); }),
              StartsWith(path("none.toml") + ": there is no such file"));
  EXPECT_THAT(message("[[sweep]]\nrecording = 'none.csv'\n"),
              StartsWith(path("none.csv") + ": there is no such file"));
}

}  // namespace
}  // namespace softsill

// Data that cannot be fitted, and fits that are stopped.
#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <atomic>
#include <string>

#include "softsill/fit.hpp"
#include "tests/recording/scratch.hpp"
#include "tests/recovery/cells.hpp"

namespace softsill::test {
namespace {

using ::testing::HasSubstr;

Recording small_recording() {
  Cell cell;
  cell.theta_1.clear();
  cell.threshold_mV = -51.0;
  Protocol protocol;
  protocol.seconds = 10.0;
  return recording_of(cell, protocol, 61);
}

Variant small_variant() {
  Variant variant;
  variant.eta.support_ms = 400.0;
  variant.theta_1.family = KernelFamily::absent;
  return variant;
}

TEST(Refusals, RefractoryTimeLongerThanAnInterval) {
  Variant variant = small_variant();
  variant.refractory.given_ms = 200.0;
  EXPECT_THAT(error_of([&] { fit(small_recording(), variant); }),
              HasSubstr("longer than the shortest interval"));
}

TEST(Refusals, ConstantInput) {
  Recording recording = small_recording();
  for (double& current : recording.sweeps[0].input) {
    current = 0.3;
  }
  EXPECT_THAT(error_of([&] { fit(recording, small_variant()); }), HasSubstr("constant"));
}

TEST(Refusals, TooFewSpikes) {
  Recording recording = small_recording();
  recording.sweeps[0].spikes_ms.resize(1);
  recording.sweeps[0].spikes_ms[0] = 5000.0;
  EXPECT_THAT(error_of([&] { fit(recording, small_variant()); }), HasSubstr("spike"));
  recording.sweeps[0].spikes_ms.clear();
  EXPECT_THAT(error_of([&] { fit(recording, small_variant()); }), HasSubstr("spike"));
}

TEST(Refusals, NothingLeftAfterLeadIns) {
  Recording recording = small_recording();
  recording.sweeps[0].analysed = {{0.0, 390.0}};
  EXPECT_THAT(error_of([&] { fit(recording, small_variant()); }),
              HasSubstr("no time is left after leaving out"));
}

TEST(Refusals, NoSweepToEstimateFrom) {
  Recording recording = small_recording();
  recording.sweeps[0].use = Use::predict;
  EXPECT_THAT(error_of([&] { fit(recording, small_variant()); }), HasSubstr("estimate"));
}

TEST(Refusals, AnchorsThatAreNone) {
  for (const char* text : {"resistance", "resistance=", "resistance=-5MOhm", "resistance=120mV",
                           "noise_level=1.5MOhm", "noise_level=1.5±-1mV", "capacitance=3pF"}) {
    EXPECT_NE(error_of([&] { parse_anchor(text); }), "(no error)") << text;
  }
}

// Stopped at every tenth report in turn: always the same answer, and never a number.
TEST(Interrupted, EndsWithoutNumbers) {
  const Recording recording = small_recording();
  for (int allowed : {0, 1, 3, 10, 30}) {
    std::atomic<int> reports{0};
    FitOptions options;
    options.threads = 2;
    options.progress = [&](double share, const std::string& words) {
      EXPECT_GE(share, 0.0);
      EXPECT_LE(share, 1.0);
      EXPECT_FALSE(words.empty());
      return reports++ < allowed;
    };
    const Estimate estimate = fit(recording, small_variant(), options);
    EXPECT_EQ(estimate.status, FitStatus::interrupted) << allowed;
    EXPECT_FALSE(estimate.noise_level.value);
    EXPECT_FALSE(estimate.threshold.value);
    EXPECT_THAT(estimate.status_sentence, HasSubstr("stopped"));
  }
}

TEST(Interrupted, ReportsOnTheWayChangeNothing) {
  const Recording recording = small_recording();
  FitOptions options;
  const Estimate quiet = fit(recording, small_variant(), options);
  int reports = 0;
  options.progress = [&](double, const std::string&) {
    ++reports;
    return true;
  };
  const Estimate told = fit(recording, small_variant(), options);
  EXPECT_GT(reports, 5);
  EXPECT_EQ(to_json(quiet), to_json(told));
}

}  // namespace
}  // namespace softsill::test

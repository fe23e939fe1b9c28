#include "softsill/quality.hpp"

#include <gmock/gmock.h>

#include <cmath>
#include <random>

#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::HasSubstr;

/// A sweep of 20 s at 0.1 ms: noise current (tau 3 ms), a spike every `interval_ms` from 50 ms on,
/// and a potential that follows the current, with spikes drawn over 1 ms.
Sweep make_sweep(double interval_ms = 100.0, unsigned seed = 1) {
  std::mt19937_64 random(seed);
  std::normal_distribution<double> normal;
  Sweep sweep;
  sweep.name = "s" + std::to_string(seed);
  sweep.step_ms = 0.1;
  sweep.input.resize(200000);
  sweep.voltage_mV.resize(sweep.input.size());
  double current = 0.0;
  double potential = 0.0;
  for (std::size_t i = 0; i < sweep.input.size(); ++i) {
    sweep.input[i] = 0.1 + current;
    sweep.voltage_mV[i] = -65.0 + potential;
    current += -current / 30.0 + 0.02 * normal(random);
    potential += (-potential + 30.0 * current) / 100.0 + 0.05 * normal(random);
  }
  for (double t = 50.0; t < 20000.0; t += interval_ms) {
    sweep.spikes_ms.push_back(t);
    for (std::size_t i = 0; i < 10; ++i) {
      sweep.voltage_mV[static_cast<std::size_t>(t * 10.0) + i] =
          30.0 - 5.0 * static_cast<double>(i);
    }
  }
  sweep.analysed = {{0.0, 20000.0}};
  return sweep;
}

Recording make_recording() {
  Recording recording;
  recording.cell = "made";
  recording.sweeps = {make_sweep()};
  return recording;
}

const Finding* find(const QualityReport& report, const std::string& words) {
  for (const Finding& finding : report.findings) {
    if ((finding.topic + ": " + finding.what).find(words) != std::string::npos) {
      return &finding;
    }
  }
  return nullptr;
}

TEST(Quality, of_a_sound_recording) {
  const QualityReport report = check_quality(make_recording());
  ASSERT_EQ(report.sweeps.size(), 1u);
  const SweepQuality& sweep = report.sweeps[0];
  EXPECT_EQ(sweep.spikes, 200u);
  EXPECT_DOUBLE_EQ(sweep.rate_Hz, 10.0);
  EXPECT_NEAR(sweep.interval_cv.value(), 0.0, 1e-12);
  EXPECT_NEAR(sweep.shortest_interval_ms.value(), 100.0, 1e-9);
  EXPECT_EQ(sweep.intervals_under_2ms, 0u);
  // Stationary SD of the current: 0.02 / sqrt(1 - (1 - 1/30)^2) = 0.0781.
  EXPECT_NEAR(sweep.input.standard_deviation, 0.0781, 0.004);
  EXPECT_NEAR(sweep.input.mean, 0.1, 0.01);
  EXPECT_NEAR(sweep.input.correlation_time_ms.value(), 3.0, 0.4);
  EXPECT_EQ(sweep.voltage->maximum_mV, 30.0);
  EXPECT_NEAR(sweep.voltage->median_subthreshold_mV.value(), -65.0, 0.2);
  EXPECT_EQ(sweep.voltage->clipped_subthreshold, 0u);
  EXPECT_EQ(report.identifiability, Identifiability::spikes_and_voltage);
  EXPECT_NE(report.worst(), Grade::stop);
  EXPECT_EQ(report.findings.front().grade, Grade::look);  // nothing is held out, no repeats
  EXPECT_NE(find(report, "none is held out"), nullptr);
  EXPECT_EQ(find(report, "spikes: 200 to estimate from")->grade, Grade::fine);
  EXPECT_NO_THROW(require_fittable(make_recording()));
}

TEST(Quality, reads_only_what_is_analysed) {
  Recording recording = make_recording();
  Sweep& sweep = recording.sweeps[0];
  sweep.analysed = {{0.0, 1000.0}, {2000.0, 3000.0}};
  sweep.input[15000] = 1e6;  // at 1500 ms, between the two
  const QualityReport report = check_quality(recording);
  EXPECT_EQ(report.sweeps[0].spikes, 20u);
  EXPECT_DOUBLE_EQ(report.sweeps[0].analysed_ms, 2000.0);
  EXPECT_DOUBLE_EQ(report.sweeps[0].rate_Hz, 10.0);
  EXPECT_LT(report.sweeps[0].input.maximum, 10.0);
  // The interval across the gap (950 to 2050 ms) is none.
  EXPECT_NEAR(report.sweeps[0].interval_cv.value(), 0.0, 1e-12);
}

TEST(Quality, leaves_undefined_numbers_out) {
  Recording recording = make_recording();
  recording.sweeps[0].spikes_ms = {100.0, 200.0};
  QualityReport report = check_quality(recording);
  EXPECT_FALSE(report.sweeps[0].interval_cv.has_value());
  EXPECT_TRUE(report.sweeps[0].shortest_interval_ms.has_value());
  EXPECT_FALSE(report.rate_drift.has_value());
  recording.sweeps[0].spikes_ms = {100.0};
  report = check_quality(recording);
  EXPECT_FALSE(report.sweeps[0].shortest_interval_ms.has_value());
  recording.sweeps[0].voltage_mV.clear();
  report = check_quality(recording);
  EXPECT_FALSE(report.sweeps[0].voltage.has_value());
  EXPECT_FALSE(report.resting_drift.has_value());
}

TEST(Quality, knows_the_identifiability_row) {
  Recording recording = make_recording();
  recording.sweeps[0].voltage_mV.clear();
  EXPECT_EQ(check_quality(recording).identifiability, Identifiability::spikes_alone);
  EXPECT_THAT(check_quality(recording).identifiability_sentence, HasSubstr("Delta in mV cannot"));
  EXPECT_EQ(check_quality(recording, true).identifiability, Identifiability::spikes_anchored);
  // One sweep without potential among those to estimate from, and it cannot be used throughout.
  recording = make_recording();
  recording.sweeps.push_back(make_sweep(90.0, 2));
  recording.sweeps[1].voltage_mV.clear();
  EXPECT_EQ(check_quality(recording).identifiability, Identifiability::spikes_alone);
  EXPECT_NE(find(check_quality(recording), "only 1 of 2 sweeps"), nullptr);
  recording.sweeps[1].use = Use::predict;
  EXPECT_EQ(check_quality(recording).identifiability, Identifiability::spikes_and_voltage);
}

TEST(Quality, stops_without_spikes) {
  Recording recording = make_recording();
  recording.sweeps[0].spikes_ms.clear();
  EXPECT_EQ(check_quality(recording).worst(), Grade::stop);
  EXPECT_NE(find(check_quality(recording), "there are none to estimate from"), nullptr);
  EXPECT_THAT(error_of([&] { require_fittable(recording); }), HasSubstr("there are no spikes"));
  recording.sweeps[0].spikes_ms = {500.0};
  EXPECT_NE(find(check_quality(recording), "there is only one to estimate from"), nullptr);
  EXPECT_THAT(error_of([&] { require_fittable(recording); }), HasSubstr("only one spike"));
  recording.sweeps[0].spikes_ms = {500.0, 600.0};
  EXPECT_NO_THROW(require_fittable(recording));
  recording.sweeps[0].analysed = {{0.0, 550.0}};  // the second lies outside the window
  EXPECT_THAT(error_of([&] { require_fittable(recording); }), HasSubstr("only one spike"));
  recording.sweeps[0].use = Use::predict;
  EXPECT_THAT(error_of([&] { require_fittable(recording); }), HasSubstr("no sweep is there"));
  EXPECT_EQ(check_quality(recording).worst(), Grade::stop);
}

TEST(Quality, stops_at_a_constant_driving_signal_unless_another_varies) {
  Recording recording = make_recording();
  std::fill(recording.sweeps[0].input.begin(), recording.sweeps[0].input.end(), 0.3);
  EXPECT_EQ(find(check_quality(recording), "is constant (0.3 nA)")->grade, Grade::stop);
  EXPECT_FALSE(check_quality(recording).sweeps[0].input.correlation_time_ms.has_value());
  EXPECT_THAT(error_of([&] { require_fittable(recording); }), HasSubstr("constant in every sweep"));
  recording.sweeps.push_back(make_sweep(90.0, 2));
  EXPECT_EQ(find(check_quality(recording), "is constant (0.3 nA)")->grade, Grade::look);
  EXPECT_NO_THROW(require_fittable(recording));
}

TEST(Quality, stops_at_a_potential_clipped_away_from_spikes_only) {
  Recording recording = make_recording();
  Sweep& sweep = recording.sweeps[0];
  for (double& value : sweep.voltage_mV) {
    value = std::min(value, 5.0);  // cuts spikes
  }
  QualityReport report = check_quality(recording);
  EXPECT_GT(report.sweeps[0].voltage->clipped_samples, 0u);
  EXPECT_EQ(report.sweeps[0].voltage->clipped_subthreshold, 0u);
  EXPECT_EQ(find(report, "is cut during spikes only")->grade, Grade::fine);
  EXPECT_NO_THROW(require_fittable(recording));

  for (double& value : sweep.voltage_mV) {
    value = std::max(value, -65.2);  // cuts what lies between spikes
  }
  report = check_quality(recording);
  EXPECT_GT(report.sweeps[0].voltage->clipped_subthreshold, 1000u);
  EXPECT_EQ(find(report, "is clipped between -65.2 and 5 mV")->grade, Grade::stop);
  EXPECT_THAT(error_of([&] { require_fittable(recording); }),
              HasSubstr("sweep 's1': the potential is clipped"));
  EXPECT_NO_THROW(require_fittable(recording, false));
}

TEST(Quality, stops_at_a_dead_channel) {
  Recording recording = make_recording();
  std::fill(recording.sweeps[0].voltage_mV.begin(), recording.sweeps[0].voltage_mV.end(), -65.0);
  EXPECT_EQ(find(check_quality(recording), "potential: is constant")->grade, Grade::stop);
  EXPECT_THAT(error_of([&] { require_fittable(recording); }),
              HasSubstr("the potential is constant"));
}

TEST(Quality, looks_at_suspicious_intervals_and_clocks) {
  Recording recording = make_recording();
  recording.sweeps[0].spikes_ms.insert(recording.sweeps[0].spikes_ms.begin() + 1, 51.5);
  const Finding* finding = nullptr;
  QualityReport report = check_quality(recording);
  ASSERT_NE(finding = find(report, "1 interval is under 2 ms, the shortest 1.5 ms"), nullptr);
  EXPECT_EQ(finding->grade, Grade::look);

  recording = make_recording();
  EXPECT_EQ(find(check_quality(recording), "of the listed spikes lie within"), nullptr);
  for (double& spike : recording.sweeps[0].spikes_ms) {
    spike += 40.0;  // another clock
  }
  report = check_quality(recording);
  ASSERT_NE(finding = find(report, "only 0 % of the listed spikes lie within 3 ms"), nullptr);
  EXPECT_EQ(finding->grade, Grade::look);
}

TEST(Quality, suspects_wrong_units) {
  Recording recording = make_recording();
  for (double& value : recording.sweeps[0].voltage_mV) {
    value /= 1e3;
  }
  for (double& value : recording.sweeps[0].input) {
    value *= 1e3;
  }
  const QualityReport report = check_quality(recording);
  EXPECT_THAT(find(report, "spans only")->remedy, HasSubstr("voltage_V"));
  EXPECT_THAT(find(report, "is large for a current")->remedy, HasSubstr("current_pA"));
}

TEST(Quality, sees_drift_of_rate_and_potential) {
  Recording recording = make_recording();
  Sweep& sweep = recording.sweeps[0];
  sweep.spikes_ms.clear();
  // Intervals that grow from 40 to 160 ms.
  for (double t = 20.0; t < 20000.0; t += 40.0 + 120.0 * t / 20000.0) {
    sweep.spikes_ms.push_back(t);
  }
  for (std::size_t i = 0; i < sweep.voltage_mV.size(); ++i) {
    sweep.voltage_mV[i] += 6.0 * static_cast<double>(i) / static_cast<double>(sweep.input.size());
  }
  const QualityReport report = check_quality(recording);
  ASSERT_TRUE(report.rate_drift.has_value());
  EXPECT_LT(report.rate_drift->p_value, 1e-6);
  EXPECT_LT(report.rate_drift->change_per_min, -30.0);
  ASSERT_TRUE(report.resting_drift.has_value());
  // 6 mV in 20 s.
  EXPECT_NEAR(report.resting_drift->change_per_min, 18.0, 1.5);
  EXPECT_EQ(find(report, "the firing rate drifts")->grade, Grade::look);
  EXPECT_EQ(find(report, "the potential between spikes drifts")->grade, Grade::look);

  const QualityReport steady = check_quality(make_recording());
  EXPECT_EQ(find(steady, "the firing rate drifts"), nullptr);
  EXPECT_EQ(find(steady, "the potential between spikes drifts"), nullptr);
}

TEST(Quality, reports_repeats_that_differ) {
  Recording recording = make_recording();
  recording.sweeps.push_back(make_sweep(100.0, 2));
  for (Sweep& sweep : recording.sweeps) {
    sweep.repeats = "frozen";
  }
  const QualityReport report = check_quality(recording);
  const Finding* const finding = find(report, "'s1' and 's2' are marked as repeats");
  ASSERT_NE(finding, nullptr);
  EXPECT_EQ(finding->grade, Grade::stop);
  EXPECT_NE(find(report, "'frozen' has only 2"), nullptr);
}

}  // namespace
}  // namespace softsill

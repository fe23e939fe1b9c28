#include "softsill/spike_detection.hpp"

#include <gmock/gmock.h>

#include <cmath>

#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::ElementsAre;
using ::testing::HasSubstr;
using ::testing::IsEmpty;

SpikeDetection level(double mV, double dead_time_ms = 1.0) {
  SpikeDetection detection;
  detection.level_mV = mV;
  detection.dead_time_ms = dead_time_ms;
  return detection;
}

TEST(SpikeDetection, interpolates_between_samples) {
  // From -60 at 10.5 ms to 20 at 11 ms: -20 is half of the way, 10.75 ms.
  const std::vector<double> voltage = {-60, -60, 20, -60, -60};
  EXPECT_THAT(detect_spikes(voltage, 10.0, 0.5), ElementsAre(10.75));
  // -40 is a quarter of the way.
  EXPECT_THAT(detect_spikes(voltage, 10.0, 0.5, level(-40)), ElementsAre(10.625));
}

TEST(SpikeDetection, counts_a_sample_on_the_level_once) {
  const std::vector<double> voltage = {-60, -20, -20, -60};
  EXPECT_THAT(detect_spikes(voltage, 0.0, 1.0), ElementsAre(1.0));
}

TEST(SpikeDetection, leaves_out_a_crossing_before_the_first_sample) {
  EXPECT_THAT(detect_spikes(std::vector<double>{0, 10, -60, 0, -60}, 0.0, 1.0),
              ElementsAre(2.0 + 40.0 / 60.0));
  EXPECT_THAT(detect_spikes(std::vector<double>{-20, 10, -60}, 0.0, 1.0), IsEmpty());
}

TEST(SpikeDetection, of_nothing_finds_nothing) {
  EXPECT_THAT(detect_spikes({}, 0.0, 0.1), IsEmpty());
  EXPECT_THAT(detect_spikes(std::vector<double>{30}, 0.0, 0.1), IsEmpty());
  EXPECT_THAT(detect_spikes(std::vector<double>(100, -65.0), 0.0, 0.1), IsEmpty());
  SpikeDetection slope;
  slope.by = SpikeDetection::By::slope;
  EXPECT_THAT(detect_spikes({}, 0.0, 0.1, slope), IsEmpty());
  EXPECT_THAT(detect_spikes(std::vector<double>{1, 2}, 0.0, 0.01, slope), IsEmpty());
}

TEST(SpikeDetection, ignores_noise_on_the_falling_flank) {
  // 1 mV of noise about the level on the way down, long after the dead time.
  const std::vector<double> voltage = {-60, 20, 10, -20.5, -19.5, -20.5, -19.5, -60, -60, 20, -60};
  EXPECT_THAT(detect_spikes(voltage, 0.0, 1.0), ElementsAre(0.5, 8.5));
}

TEST(SpikeDetection, keeps_the_dead_time_and_not_more) {
  // Crossings at 0.5, 2.5 and 4.5 ms.
  const std::vector<double> voltage = {-60, 20, -60, 20, -60, 20, -60};
  EXPECT_THAT(detect_spikes(voltage, 0.0, 1.0, level(-20, 1.9)), ElementsAre(0.5, 2.5, 4.5));
  // 2.5 is too soon after 0.5; 4.5 is not too soon after 0.5: a dead time is not extended.
  EXPECT_THAT(detect_spikes(voltage, 0.0, 1.0, level(-20, 3.0)), ElementsAre(0.5, 4.5));
  EXPECT_THAT(detect_spikes(voltage, 0.0, 1.0, level(-20, 0.0)), ElementsAre(0.5, 2.5, 4.5));
}

TEST(SpikeDetection, by_slope_takes_the_middle_of_the_rise) {
  // V = 0 until 1 ms, then rises with 2 a (t - 1) mV/ms: the slope of V is 15 at t = 1 + 15 / (2
  // a).
  const double a = 100.0;
  const double step = 0.02;
  std::vector<double> voltage(100);
  for (std::size_t i = 0; i < voltage.size(); ++i) {
    const double t = step * static_cast<double>(i) - 1.0;
    voltage[i] = t > 0 ? a * t * t : 0.0;
  }
  SpikeDetection detection;
  detection.by = SpikeDetection::By::slope;
  const std::vector<double> times = detect_spikes(voltage, 5.0, step, detection);
  ASSERT_EQ(times.size(), 1u);
  // The central difference of a parabola is exact; linear interpolation of a line is, too.
  EXPECT_NEAR(times[0], 5.0 + 1.0 + 15.0 / (2.0 * a), 1e-9);
}

TEST(SpikeDetection, finds_every_spike_of_a_train_at_any_sampling) {
  // Triangular spikes of 90 mV, up in 0.5 ms and down in 1 ms, every 7.3 ms: the level -20 is
  // crossed where 45 of the 90 mV are climbed, 0.25 ms after each start.
  for (const double step : {0.02, 0.05, 0.1}) {
    std::vector<double> voltage(static_cast<std::size_t>(1000.0 / step));
    for (std::size_t i = 0; i < voltage.size(); ++i) {
      const double t = std::fmod(step * static_cast<double>(i), 7.3);
      voltage[i] = -65.0 + (t < 0.5 ? 180.0 * t : std::max(0.0, 90.0 - 90.0 * (t - 0.5)));
    }
    const std::vector<double> times = detect_spikes(voltage, 0.0, step);
    ASSERT_EQ(times.size(), 137u) << step;  // 0.25 + 136 * 7.3 = 993.05 < 1000
    for (std::size_t k = 0; k < times.size(); ++k) {
      // The corner at the start bends the line that is interpolated by less than a step.
      EXPECT_NEAR(times[k], 0.25 + 7.3 * static_cast<double>(k), 0.5 * step);
    }
  }
}

TEST(SpikeDetection, refuses_impossible_options) {
  const std::vector<double> voltage = {-60, 20};
  EXPECT_THAT(error_of([&] { detect_spikes(voltage, 0.0, 0.0); }), HasSubstr("sampling interval"));
  EXPECT_THAT(error_of([&] { detect_spikes(voltage, 0.0, 1.0, level(-20, -1)); }),
              HasSubstr("dead time"));
  EXPECT_THAT(error_of([&] { detect_spikes(voltage, 0.0, 1.0, level(NAN)); }), HasSubstr("level"));
  SpikeDetection slope;
  slope.by = SpikeDetection::By::slope;
  slope.slope_mV_per_ms = 0.0;
  EXPECT_THAT(error_of([&] { detect_spikes(voltage, 0.0, 1.0, slope); }), HasSubstr("slope"));
}

TEST(SpikeDetection, describes_itself) {
  EXPECT_EQ(to_string(SpikeDetection{}), "upward crossing of -20 mV, dead time 1 ms");
  SpikeDetection slope;
  slope.by = SpikeDetection::By::slope;
  EXPECT_EQ(to_string(slope), "rate of rise crossing 15 mV/ms, dead time 1 ms");
}

}  // namespace
}  // namespace softsill

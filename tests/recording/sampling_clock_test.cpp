#include "estimator/recording/sampling_clock.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <cstdio>
#include <cstdlib>

namespace softsill {
namespace {

/// Feeds times as a file would hold them, printed with so many decimals.
/// \returns the number of the row that was refused, or -1
long feed_text(SamplingClock& clock, double start, double step, long rows, int decimals,
               long skip_at = -1) {
  for (long i = 0; i < rows; ++i) {
    const long tick = skip_at >= 0 && i >= skip_at ? i + 1 : i;
    char text[64];
    std::snprintf(text, sizeof text, "%.*f", decimals, start + step * static_cast<double>(tick));
    if (!clock.add(std::strtod(text, nullptr), std::pow(10.0, -decimals))) {
      return i;
    }
  }
  return -1;
}

TEST(SamplingClock, reads_common_rates_from_rounded_text) {
  struct Case {
    double step_ms;
    int decimals;
  };
  for (const Case& c : {Case{0.1, 1}, Case{0.05, 2}, Case{0.02, 2}, Case{0.025, 2}, Case{0.025, 3},
                        Case{1.0 / 30.0, 3}, Case{1.0 / 30.0, 4}, Case{1.0, 0}, Case{0.04, 6}}) {
    SamplingClock clock(1, 1);
    EXPECT_EQ(feed_text(clock, 0.0, c.step_ms, 20000, c.decimals), -1) << c.step_ms;
    EXPECT_NEAR(clock.step_ms(), c.step_ms, 1e-12) << c.step_ms << ' ' << c.decimals;
  }
}

TEST(SamplingClock, finds_a_missing_sample_wherever_it_is) {
  for (const double step : {0.1, 0.05, 0.02, 0.025, 1.0 / 30.0, 1.0}) {
    const int decimals = step == 1.0                           ? 0
                         : step == 0.1                         ? 1
                         : step * 30.0 == 1.0 || step == 0.025 ? 3
                                                               : 2;
    for (const long at : {2L, 10L, 999L, 50000L, 99999L}) {
      SamplingClock clock(1, 1);
      const long refused = feed_text(clock, 250.0, step, 100000, decimals, at);
      EXPECT_GE(refused, at) << step;
      // Two rows alone do not tell the step from its rounding; a few more do.
      EXPECT_LE(refused, at == 2 ? at + 6 : at) << step;
    }
  }
}

TEST(SamplingClock, finds_a_missing_sample_a_little_later_where_rounding_hides_it) {
  // 0.025 ms in steps of 0.01: 0.00, 0.03 and 0.08 could also be 0.035 ms apart.
  for (const long at : {2L, 10L, 999L, 50000L}) {
    SamplingClock clock(1, 1);
    const long refused = feed_text(clock, 250.0, 0.025, 100000, 2, at);
    EXPECT_GE(refused, at);
    EXPECT_LE(refused, at + 6);
  }
}

TEST(SamplingClock, finds_doubled_and_backward_times) {
  SamplingClock doubled(1, 1);
  EXPECT_TRUE(doubled.add(0.0, 0.1));
  EXPECT_FALSE(doubled.add(0.0, 0.1));
  SamplingClock later(1, 1);
  EXPECT_TRUE(later.add(0.0, 0.1));
  EXPECT_TRUE(later.add(0.1, 0.1));
  EXPECT_TRUE(later.add(0.2, 0.1));
  EXPECT_FALSE(later.add(0.2, 0.1));
  SamplingClock backward(1, 1);
  EXPECT_TRUE(backward.add(5.0, 0.0));
  EXPECT_FALSE(backward.add(4.9, 0.0));
}

TEST(SamplingClock, finds_a_change_of_rate) {
  SamplingClock clock(1, 1);
  double time = 0.0;
  long refused = -1;
  for (long i = 0; i < 2000 && refused < 0; ++i) {
    refused = clock.add(time, 1e-6) ? -1 : i;
    time += i < 1000 ? 0.1 : 0.11;
  }
  // 4 % of 0.1 ms allow no more than one step of 0.11.
  EXPECT_GT(refused, 1000);
  EXPECT_LE(refused, 1002);
}

TEST(SamplingClock, accepts_32_bit_floats_even_where_they_are_coarser_than_the_step) {
  // 30 minutes at 50 kHz: at 1.8e6 ms neighbouring floats lie 0.125 ms apart, six samples.
  for (const double start : {0.0, 1.7e6}) {
    SamplingClock clock(1, 1);
    const long rows = 5'000'000;
    for (long i = 0; i < rows; ++i) {
      const auto time = static_cast<float>(start + 0.02 * static_cast<double>(i));
      ASSERT_TRUE(clock.add(static_cast<double>(time), 0.0)) << i;
    }
    EXPECT_NEAR(clock.step_ms(), 0.02, 1e-12);
  }
}

TEST(SamplingClock, still_finds_gaps_among_floats_that_are_fine_enough) {
  SamplingClock clock(1, 1);
  long refused = -1;
  for (long i = 0; i < 200000 && refused < 0; ++i) {
    const auto time = static_cast<float>(0.05 * static_cast<double>(i < 150000 ? i : i + 1));
    refused = clock.add(static_cast<double>(time), 0.0) ? -1 : i;
  }
  EXPECT_EQ(refused, 150000);
}

TEST(SamplingClock, converts_units_without_losing_digits) {
  SamplingClock seconds(1e3, 1);
  feed_text(seconds, 0.0, 5e-5, 10000, 5);
  EXPECT_EQ(seconds.step_ms(), 0.05);
  SamplingClock microseconds(1, 1e3);
  feed_text(microseconds, 100.0, 50.0, 10000, 0);
  EXPECT_EQ(microseconds.step_ms(), 0.05);
  EXPECT_EQ(microseconds.first_ms(), 0.1);
}

TEST(SamplingClock, tells_nothing_from_one_row) {
  SamplingClock clock(1, 1);
  EXPECT_EQ(clock.step_ms(), 0.0);
  clock.add(1.0, 0.1);
  EXPECT_EQ(clock.step_ms(), 0.0);
}

}  // namespace
}  // namespace softsill

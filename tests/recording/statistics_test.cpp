#include "estimator/recording/statistics.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <complex>
#include <cstdio>
#include <numbers>
#include <numeric>
#include <random>

namespace softsill {
namespace {

std::vector<double> ornstein_uhlenbeck(std::size_t count, double step_over_tau, unsigned seed) {
  std::mt19937_64 random(seed);
  std::normal_distribution<double> normal;
  const double keep = std::exp(-step_over_tau);
  std::vector<double> values(count);
  double x = normal(random);
  for (double& value : values) {
    value = x;
    x = keep * x + std::sqrt(1.0 - keep * keep) * normal(random);
  }
  return values;
}

TEST(FourierTransform, agrees_with_the_sum_that_defines_it) {
  for (const std::size_t size : {1u, 2u, 8u, 64u}) {
    std::vector<std::complex<double>> values(size);
    std::mt19937_64 random(size);
    std::normal_distribution<double> normal;
    for (auto& value : values) {
      value = {normal(random), normal(random)};
    }
    std::vector<std::complex<double>> sums(size);
    for (std::size_t k = 0; k < size; ++k) {
      for (std::size_t n = 0; n < size; ++n) {
        sums[k] +=
            values[n] * std::polar(1.0, -2.0 * std::numbers::pi * static_cast<double>(k * n) /
                                            static_cast<double>(size));
      }
    }
    fourier_transform(values);
    for (std::size_t k = 0; k < size; ++k) {
      EXPECT_NEAR(std::abs(values[k] - sums[k]), 0.0, 1e-12 * static_cast<double>(size));
    }
  }
}

// An Ornstein-Uhlenbeck process has autocorrelation exp(-lag / tau), and the share of its variance
// below f is (2 / pi) atan(2 pi f tau): 90 % lie below tan(0.45 pi) / (2 pi tau).
TEST(Spectrum, of_an_ornstein_uhlenbeck_process) {
  const double step = 0.1;
  const double tau = 5.0;
  const auto values = ornstein_uhlenbeck(2'000'000, step / tau, 3);
  const Spectrum spectrum = describe_spectrum({std::span<const double>(values)}, step, 0.0);
  ASSERT_TRUE(spectrum.correlation_time_ms.has_value());
  EXPECT_NEAR(*spectrum.correlation_time_ms, tau, 0.1 * tau);
  ASSERT_TRUE(spectrum.bandwidth_Hz.has_value());
  const double expected = 1e3 * std::tan(0.45 * std::numbers::pi) / (2.0 * std::numbers::pi * tau);
  EXPECT_NEAR(*spectrum.bandwidth_Hz, expected, 0.05 * expected);
}

TEST(Spectrum, of_white_noise_ends_at_nine_tenths_of_the_highest_frequency) {
  std::mt19937_64 random(5);
  std::normal_distribution<double> normal;
  std::vector<double> values(1 << 18);
  for (double& value : values) {
    value = normal(random);
  }
  const Spectrum spectrum = describe_spectrum({std::span<const double>(values)}, 0.1, 0.0);
  EXPECT_NEAR(*spectrum.bandwidth_Hz, 0.9 * 5000.0, 50.0);
  // From 1 at lag 0 to 0 at one step: 1/e after (1 - 1/e) of it.
  EXPECT_NEAR(*spectrum.correlation_time_ms, 0.1 * (1.0 - 1.0 / std::numbers::e), 0.002);
}

TEST(Spectrum, of_a_sine_is_its_frequency) {
  std::vector<double> values(1 << 16);
  for (std::size_t i = 0; i < values.size(); ++i) {
    values[i] = std::sin(2.0 * std::numbers::pi * 0.05 * 0.1 * static_cast<double>(i));  // 50 Hz
  }
  const Spectrum spectrum = describe_spectrum({std::span<const double>(values)}, 0.1, 0.0);
  EXPECT_NEAR(*spectrum.bandwidth_Hz, 50.0, 0.5);
  // cos(2 pi f lag) = 1/e.
  EXPECT_NEAR(*spectrum.correlation_time_ms,
              std::acos(1.0 / std::numbers::e) / (2.0 * std::numbers::pi * 0.05), 0.01);
}

TEST(Spectrum, is_absent_where_it_is_not_defined) {
  const std::vector<double> constant(1000, 0.0);
  const Spectrum none = describe_spectrum({std::span<const double>(constant)}, 0.1, 0.0);
  EXPECT_FALSE(none.correlation_time_ms || none.bandwidth_Hz);
  const std::vector<double> few(63, 1.0);
  EXPECT_FALSE(describe_spectrum({std::span<const double>(few)}, 0.1, 0.0).bandwidth_Hz);
  EXPECT_FALSE(describe_spectrum({}, 0.1, 0.0).bandwidth_Hz);
  // One slow ramp: correlated over more than a quarter of what there is.
  std::vector<double> ramp(4096);
  std::iota(ramp.begin(), ramp.end(), -2048.0);
  EXPECT_FALSE(describe_spectrum({std::span<const double>(ramp)}, 0.1, 0.0).correlation_time_ms);
}

// n! orders, of which the rising and the falling one are as extreme as the rising one.
TEST(OrderCorrelation, of_few_values_counts_permutations) {
  EXPECT_NEAR(order_correlation_p(std::vector<double>{1, 2, 3}), 2.0 / 6.0, 1e-12);
  EXPECT_NEAR(order_correlation_p(std::vector<double>{5, 4, 3, 2, 1}), 2.0 / 120.0, 1e-12);
  EXPECT_NEAR(order_correlation_p(std::vector<double>{1, 2, 3, 4, 5, 6, 7, 8, 9}), 2.0 / 362880.0,
              1e-15);
  EXPECT_EQ(order_correlation_p(std::vector<double>{2, 2, 2, 2}), 1.0);
  EXPECT_EQ(order_correlation_p(std::vector<double>{1, 2}), 1.0);
  // Ranks 0, 0.5+0.5 tied, ...: of the 12 arrangements of {1, 2, 2, 3}, only the sorted and the
  // reversed one reach |sum| of the sorted one.
  EXPECT_NEAR(order_correlation_p(std::vector<double>{1, 2, 2, 3}), 2.0 / 12.0, 1e-12);
}

// R's cor.test, live. For n = 10 to 1290 its exact = FALSE is the same Student approximation.
TEST(OrderCorrelation, agrees_with_R) {
  if (std::system("Rscript --version > /dev/null 2>&1") != 0) {
    GTEST_SKIP() << "R is not installed";
  }
  const std::vector<std::vector<double>> samples = {
      {3.1, 2.7, 4.4, 1.9, 5.5, 3.2},
      {2, 9, 4, 7, 7.5, 1, 8, 12},
      {1.5, 0.2, 2.9, 3.3, 2.8, 4.1, 3.9, 5.5, 4.2, 5.1, 6.2, 4.9},
      {5, 3, 5.5, 2, 8, 1, 9, 4, 7, 6, 12, 10, 3.5, 11, 0, 2.5, 13, 8.5, 1.5, 4.5},
      {1, 2, 2, 3, 1, 5, 4, 5, 3, 6, 6, 2}};
  for (const std::vector<double>& sample : samples) {
    std::string list;
    for (const double value : sample) {
      list += list.empty() ? "" : ",";
      list += std::to_string(value);
    }
    const bool small = sample.size() <= 9;
    const std::string command =
        "Rscript --vanilla -e 'y <- c(" + list +
        "); p <- suppressWarnings(cor.test(seq_along(y), y, method = \"spearman\", exact = " +
        (small ? "TRUE" : "FALSE") + ", continuity = FALSE)$p.value); cat(sprintf(\"%.15g\", p))'";
    std::FILE* const pipe = ::popen(command.c_str(), "r");
    ASSERT_NE(pipe, nullptr);
    double reference = -1.0;
    const int got = std::fscanf(pipe, "%lf", &reference);
    ASSERT_EQ(::pclose(pipe), 0);
    ASSERT_EQ(got, 1);
    EXPECT_NEAR(order_correlation_p(sample), reference, 1e-9 * reference) << list;
  }
}

TEST(LeastSquares, of_points_on_a_line) {
  EXPECT_DOUBLE_EQ(least_squares_slope(std::vector<double>{1, 2, 4}, std::vector<double>{5, 3, -1}),
                   -2.0);
  EXPECT_EQ(least_squares_slope(std::vector<double>{1, 1}, std::vector<double>{5, 3}), 0.0);
}

TEST(Median, is_the_lower_middle) {
  std::vector<double> odd = {5, 1, 3};
  EXPECT_EQ(median(odd), 3);
  std::vector<double> even = {4, 1, 3, 2};
  EXPECT_EQ(median(even), 2);
}

TEST(Clipping, is_found_at_either_end) {
  auto values = ornstein_uhlenbeck(20000, 0.02, 11);
  EXPECT_TRUE(clipped_runs(values, 0.1).empty());
  for (const double sign : {1.0, -1.0}) {
    std::vector<double> clipped = values;
    std::size_t stuck = 0;
    for (double& value : clipped) {
      value = sign * std::min(sign * value, 1.0);
      stuck += value == sign ? 1 : 0;
    }
    std::size_t in_runs = 0;
    for (const SampleRange& run : clipped_runs(clipped, 0.1)) {
      for (std::size_t i = run.begin; i < run.end; ++i) {
        EXPECT_EQ(clipped[i], sign);
      }
      in_runs += run.end - run.begin;
    }
    EXPECT_GT(static_cast<double>(in_runs), 0.7 * static_cast<double>(stuck));
    EXPECT_LE(in_runs, stuck);
  }
}

TEST(Clipping, is_not_confused_with_rounding) {
  // Rounded to a tenth of the standard deviation, many neighbours are equal, the extremes too.
  for (unsigned seed = 1; seed <= 50; ++seed) {
    auto values = ornstein_uhlenbeck(50000, 0.01, seed);
    for (double& value : values) {
      value = std::round(value * 10.0) / 10.0;
    }
    EXPECT_TRUE(clipped_runs(values, 0.1).empty()) << seed;
  }
}

TEST(Clipping, of_constants_and_nothing_is_none) {
  EXPECT_TRUE(clipped_runs({}, 0.1).empty());
  EXPECT_TRUE(clipped_runs(std::vector<double>(100, 1.0), 0.1).empty());
}

}  // namespace
}  // namespace softsill

#pragma once

/// \file bootstrap.hpp
/// Intervals by resampling units: trials of a cell, trials of a model, or stretches of time.
///
/// A statistic is a function of how often each unit was drawn (its weight; all 1 for the data as
/// they are). That serves means over pairs of trials, rates, and sums over time alike. Replicate r
/// uses the random stream (seed, r): results depend on the seed only.

#include <cstdint>
#include <functional>
#include <optional>
#include <span>
#include <string>
#include <vector>

namespace softsill::metrics {

/// Weights of the units of the first and of the second group (the second may be empty). A jackknife
/// uses weights too. Returns NaN where the statistic is undefined.
using WeightedStatistic =
    std::function<double(std::span<const double> first, std::span<const double> second)>;

enum class IntervalMethod {
  percentile,
  basic,
  studentised,
  bca  ///< bias-corrected and accelerated (Efron 1987, J. Am. Stat. Assoc. 82:171)
};

/// How the units of one group are drawn.
struct Resampling {
  enum class Kind {
    independent,  ///< units are exchangeable: trials
    /// Units are consecutive stretches of time; runs of geometric length with the given mean,
    /// wrapped around (Politis & Romano 1994, J. Am. Stat. Assoc. 89:1303).
    stationary,
    /// The same with runs of fixed length (Kuensch 1989, wrapped around).
    block
  };
  Kind kind = Kind::independent;
  double block = 1.0;  ///< mean or fixed length of a run, in units; at least 1
};

struct BootstrapOptions {
  std::size_t replicates = 2000;
  std::uint64_t seed = 1;
  IntervalMethod method = IntervalMethod::bca;
  double level = 0.95;
  Resampling first, second;
  /// Fewer units than this in a group give no interval: with 3 trials only 10 different resamples
  /// exist, and their spread says little about other trials.
  std::size_t fewest_units = 4;
};

struct Interval {
  double low = 0.0, high = 0.0;
  /// Standard deviation of the ends over repetitions of the resampling with other seeds, found by
  /// resampling the replicates.
  double low_error = 0.0, high_error = 0.0;
};

struct Bootstrap {
  double estimate = 0.0;  ///< NaN when the statistic of the data is undefined
  std::optional<Interval> interval;
  std::string absence;  ///< why there is no interval
  std::vector<std::string> warnings;
  double bias = 0.0;             ///< mean of the replicates minus the estimate
  double standard_error = 0.0;   ///< standard deviation of the replicates
  double bias_correction = 0.0;  ///< z_0 of BCa
  double acceleration = 0.0;     ///< a of BCa
  std::size_t undefined = 0;     ///< replicates for which the statistic is undefined
  std::uint64_t seed = 0;
  IntervalMethod method = IntervalMethod::bca;
  double level = 0.95;
  std::vector<double> replicates;  ///< those that are defined, in order of drawing
  /// Standard error of each replicate; studentised only.
  std::vector<double> replicate_errors;
};

/// \param first_units   size of the first group, resampled together
/// \param second_units  size of the second group; 0 for one-way resampling
/// \param statistic     of the weights; called with total weights equal to the number of units, and
///                      by the jackknife with one unit left out
/// \throws Error on options out of range
Bootstrap bootstrap(std::size_t first_units, std::size_t second_units,
                    const WeightedStatistic& statistic, const BootstrapOptions& options = {});

/// Ratio of two statistics, resampled as a ratio. A warning is added when the denominator is within
/// 3 standard errors of 0; where it is not positive the replicate counts as undefined.
Bootstrap bootstrap_ratio(std::size_t first_units, std::size_t second_units,
                          const WeightedStatistic& numerator, const WeightedStatistic& denominator,
                          const BootstrapOptions& options = {});

/// The weights that replicate `replicate` draws for a group; `group` is 0 for the first, 1 for the
/// second.
std::vector<double> draw_weights(std::size_t units, const Resampling& resampling,
                                 std::uint64_t seed, std::size_t replicate, int group);

/// Interval from replicates that were made elsewhere, by the formulas of Davison & Hinkley (1997,
/// Bootstrap Methods and their Application, ch. 5), quantiles interpolated on the normal scale.
/// \param acceleration             BCa only
/// \param error, replicate_errors  standard errors of estimate and replicates, studentised only
/// \returns no Monte Carlo errors (0). \throws Error with fewer than 2 replicates
Interval interval_from_replicates(std::span<const double> replicates, double estimate,
                                  IntervalMethod method, double level, double acceleration = 0.0,
                                  double error = 0.0,
                                  std::span<const double> replicate_errors = {});

/// Acceleration from values of the statistic with one unit of a group left out at a time; influence
/// (n - 1) (mean - value). Two groups: sum n^-3 L^3 / (6 (sum n^-2 L^2)^(3/2)).
double acceleration(std::span<const double> first_left_out,
                    std::span<const double> second_left_out = {});
/// z_0: normal quantile of the share of replicates below the estimate, ties counted half.
double bias_correction(std::span<const double> replicates, double estimate);
/// Standard error from values with one unit left out at a time (Efron & Stein 1981).
double jackknife_error(std::span<const double> left_out);

/// What to tell the reader of an interval from so few trials, by coverage found in simulation
/// (tests/metrics/coverage_test.cpp: 86-94 % with 5 and 10 trials, 93-96 % with 20); empty from 20
/// trials on. Contains few_trials_words. bootstrap() adds it to its warnings.
std::optional<std::string> coverage_warning(std::size_t trials, IntervalMethod method);
inline constexpr const char* few_trials_words = "may hold the truth less often than it says";

/// "BCa", "percentile", ...
std::string name_of(IntervalMethod method);

}  // namespace softsill::metrics

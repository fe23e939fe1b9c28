// From replicates to intervals (Davison & Hinkley 1997, ch. 5).

#include "metrics/inference/intervals.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>

#include "metrics/inference/normal.hpp"
#include "softsill/error.hpp"
#include "softsill/metrics/bootstrap.hpp"

namespace softsill::metrics {
namespace inner {

double normal_scale_quantile(std::span<const double> sorted, double level) {
  const auto count = static_cast<double>(sorted.size());
  const double rank = (count + 1.0) * level;
  // The guard keeps exact ranks such as 1000 * 0.025 exact.
  double whole = std::floor(rank);
  if (rank - whole > 1.0 - 1e-10) {
    whole += 1.0;
  }
  if (whole < 1.0) {
    return sorted.front();
  }
  if (whole >= count) {
    return sorted.back();
  }
  const auto k = static_cast<std::size_t>(whole);
  const double below = sorted[k - 1];
  if (std::abs(rank - whole) <= 1e-10) {
    return below;
  }
  const double z = normal_quantile(level), z_low = normal_quantile(whole / (count + 1.0)),
               z_high = normal_quantile((whole + 1.0) / (count + 1.0));
  return below + (z - z_low) / (z_high - z_low) * (sorted[k] - below);
}

double share_below(std::span<const double> sorted, double estimate) {
  const auto [first, last] = std::equal_range(sorted.begin(), sorted.end(), estimate);
  const auto less = static_cast<double>(first - sorted.begin());
  const auto ties = static_cast<double>(last - first);
  return (less + 0.5 * ties) / static_cast<double>(sorted.size());
}

std::pair<double, double> levels(const Recipe& recipe, double z_0) {
  const double tail = 0.5 * (1.0 - recipe.level);
  if (recipe.method != IntervalMethod::bca) {
    return {tail, 1.0 - tail};
  }
  const auto shifted = [&](double level) {
    const double z = z_0 + normal_quantile(level);
    return normal_cdf(z_0 + z / (1.0 - recipe.acceleration * z));
  };
  return {shifted(tail), shifted(1.0 - tail)};
}

std::pair<double, double> ends(std::span<const double> sorted, const Recipe& recipe) {
  const double z_0 = recipe.method == IntervalMethod::bca
                         ? normal_quantile(share_below(sorted, recipe.estimate))
                         : 0.0;
  const auto [low_level, high_level] = levels(recipe, z_0);
  const double low = normal_scale_quantile(sorted, low_level);
  const double high = normal_scale_quantile(sorted, high_level);
  switch (recipe.method) {
    case IntervalMethod::basic:
      return {2.0 * recipe.estimate - high, 2.0 * recipe.estimate - low};
    case IntervalMethod::studentised:
      return {recipe.estimate - recipe.error * high, recipe.estimate - recipe.error * low};
    case IntervalMethod::percentile:
    case IntervalMethod::bca:
      break;
  }
  return {low, high};
}

}  // namespace inner

Interval interval_from_replicates(std::span<const double> replicates, double estimate,
                                  IntervalMethod method, double level, double acceleration,
                                  double error, std::span<const double> replicate_errors) {
  if (replicates.size() < 2) {
    throw Error("", "bootstrap", "an interval needs at least 2 replicates");
  }
  if (!(level > 0.0 && level < 1.0)) {
    throw Error("", "bootstrap", "the level of an interval lies between 0 and 1");
  }
  std::vector<double> sorted(replicates.begin(), replicates.end());
  if (method == IntervalMethod::studentised) {
    if (replicate_errors.size() != replicates.size()) {
      throw Error("", "bootstrap", "a studentised interval needs one standard error per replicate");
    }
    for (std::size_t i = 0; i < sorted.size(); ++i) {
      sorted[i] = (sorted[i] - estimate) / replicate_errors[i];
    }
  }
  std::sort(sorted.begin(), sorted.end());
  const auto [low, high] = inner::ends(sorted, {method, level, estimate, acceleration, error});
  return {low, high};
}

namespace {

// Sums of squares and cubes of the influences (n - 1) (mean - value), each over powers of n.
std::pair<double, double> influence_sums(std::span<const double> left_out) {
  if (left_out.size() < 2) {
    return {0.0, 0.0};
  }
  const auto n = static_cast<double>(left_out.size());
  const double mean = std::accumulate(left_out.begin(), left_out.end(), 0.0) / n;
  double squares = 0.0, cubes = 0.0;
  for (const double value : left_out) {
    const double influence = (n - 1.0) * (mean - value);
    squares += influence * influence;
    cubes += influence * influence * influence;
  }
  return {squares / (n * n), cubes / (n * n * n)};
}

}  // namespace

double acceleration(std::span<const double> first_left_out,
                    std::span<const double> second_left_out) {
  const auto [squares_1, cubes_1] = influence_sums(first_left_out);
  const auto [squares_2, cubes_2] = influence_sums(second_left_out);
  const double squares = squares_1 + squares_2;
  return squares > 0.0 ? (cubes_1 + cubes_2) / (6.0 * squares * std::sqrt(squares)) : 0.0;
}

double bias_correction(std::span<const double> replicates, double estimate) {
  std::vector<double> sorted(replicates.begin(), replicates.end());
  std::sort(sorted.begin(), sorted.end());
  return normal_quantile(inner::share_below(sorted, estimate));
}

double jackknife_error(std::span<const double> left_out) {
  const auto n = static_cast<double>(left_out.size());
  // Influences over n are deviations times (n - 1) / n; Efron & Stein's variance is
  // (n - 1) / n times the sum of squared deviations.
  return n < 2.0 ? 0.0 : std::sqrt(influence_sums(left_out).first * n / (n - 1.0));
}

std::string name_of(IntervalMethod method) {
  switch (method) {
    case IntervalMethod::percentile:
      return "percentile";
    case IntervalMethod::basic:
      return "basic";
    case IntervalMethod::studentised:
      return "studentised";
    case IntervalMethod::bca:
      return "BCa";
  }
  return {};
}

}  // namespace softsill::metrics

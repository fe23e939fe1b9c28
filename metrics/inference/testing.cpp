#include "softsill/metrics/testing.hpp"

#include <algorithm>
#include <boost/math/special_functions/gamma.hpp>
#include <cmath>
#include <numeric>

#include "metrics/inference/normal.hpp"
#include "softsill/error.hpp"
#include "softsill/random.hpp"

namespace softsill::metrics {
namespace {

void check_level(double level) {
  if (!(level > 0.0 && level < 1.0)) {
    throw Error("", "interval", "the level lies between 0 and 1", "0.95 is usual");
  }
}

std::vector<std::size_t> rising_order(std::span<const double> p_values) {
  for (const double p : p_values) {
    if (!(p >= 0.0 && p <= 1.0)) {
      throw Error("", "family of tests", "a p-value lies outside 0 to 1");
    }
  }
  std::vector<std::size_t> order(p_values.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::stable_sort(order.begin(), order.end(),
                   [&](std::size_t a, std::size_t b) { return p_values[a] < p_values[b]; });
  return order;
}

void check_weights(std::span<const double> weights) {
  double sum = 0.0;
  bool positive = true;
  for (const double weight : weights) {
    sum += weight;
    positive = positive && weight >= 0.0;
  }
  if (!positive || !(std::abs(sum - 1.0) < 1e-9)) {
    throw Error("", "chi-square mixture", "the weights must not be negative and must add up to 1");
  }
}

}  // namespace

Range wilson_interval(std::size_t successes, std::size_t trials, double level) {
  check_level(level);
  if (trials == 0 || successes > trials) {
    throw Error("", "proportion", "it needs trials, and no more successes than trials");
  }
  const auto n = static_cast<double>(trials);
  const double share = static_cast<double>(successes) / n;
  const double z = normal_quantile(0.5 + 0.5 * level), z2 = z * z;
  const double centre = (share + 0.5 * z2 / n) / (1.0 + z2 / n);
  const double half =
      z / (1.0 + z2 / n) * std::sqrt(share * (1.0 - share) / n + 0.25 * z2 / (n * n));
  return {successes == 0 ? 0.0 : std::max(0.0, centre - half),
          successes == trials ? 1.0 : std::min(1.0, centre + half)};
}

Range poisson_interval(std::size_t count, double level) {
  check_level(level);
  const double tail = 0.5 * (1.0 - level);
  const auto k = static_cast<double>(count);
  // The mean at which the count, or less, has probability `tail` is a gamma quantile.
  return {count == 0 ? 0.0 : boost::math::gamma_p_inv(k, tail),
          boost::math::gamma_q_inv(k + 1.0, tail)};
}

std::vector<double> holm(std::span<const double> p_values) {
  const std::vector<std::size_t> order = rising_order(p_values);
  std::vector<double> adjusted(p_values.size());
  double running = 0.0;
  for (std::size_t rank = 0; rank < order.size(); ++rank) {
    const auto left = static_cast<double>(order.size() - rank);
    running = std::max(running, std::min(1.0, left * p_values[order[rank]]));
    adjusted[order[rank]] = running;
  }
  return adjusted;
}

std::vector<double> benjamini_hochberg(std::span<const double> p_values) {
  const std::vector<std::size_t> order = rising_order(p_values);
  const auto count = static_cast<double>(order.size());
  std::vector<double> adjusted(p_values.size());
  double running = 1.0;
  for (std::size_t rank = order.size(); rank > 0; --rank) {
    running = std::min(running, count / static_cast<double>(rank) * p_values[order[rank - 1]]);
    adjusted[order[rank - 1]] = running;
  }
  return adjusted;
}

SignFlip sign_flip_test(std::span<const double> differences, std::size_t draws,
                        std::uint64_t seed) {
  if (differences.empty() || draws == 0) {
    throw Error("", "paired comparison", "it needs differences and at least one draw");
  }
  double sum = 0.0, scale = 0.0;
  for (const double difference : differences) {
    if (!std::isfinite(difference)) {
      throw Error("", "paired comparison", "a difference is not a finite number");
    }
    sum += difference;
    scale += std::abs(difference);
  }
  const std::size_t n = differences.size();
  SignFlip result;
  result.mean = sum / static_cast<double>(n);
  result.exact = n <= 16;
  // Sums that differ by rounding only count as equal.
  const double observed = std::abs(sum) - 1e-12 * scale;
  std::size_t extreme = 0;
  result.patterns = result.exact ? std::size_t{1} << n : draws;
  RandomStream random(seed, 0);
  for (std::size_t pattern = 0; pattern < result.patterns; ++pattern) {
    double flipped = 0.0;
    std::uint64_t bits = 0;
    for (std::size_t i = 0; i < n; ++i) {
      if (i % 64 == 0) {
        bits = result.exact ? pattern : random();
      }
      flipped += (bits >> (i % 64)) & 1u ? differences[i] : -differences[i];
    }
    extreme += std::abs(flipped) >= observed;
  }
  const std::size_t itself = result.exact ? 0 : 1;
  result.p_value =
      static_cast<double>(extreme + itself) / static_cast<double>(result.patterns + itself);
  return result;
}

double chi_square_mixture_p(double statistic, std::span<const double> weights) {
  check_weights(weights);
  if (std::isnan(statistic)) {
    throw Error("", "chi-square mixture", "the statistic is not a number");
  }
  if (statistic <= 0.0) {
    return 1.0;
  }
  double p = 0.0;
  for (std::size_t k = 1; k < weights.size(); ++k) {
    if (weights[k] > 0.0) {
      p += weights[k] * boost::math::gamma_q(0.5 * static_cast<double>(k), 0.5 * statistic);
    }
  }
  return p;
}

double chi_square_mixture_critical(double p, std::span<const double> weights) {
  check_weights(weights);
  if (!(p > 0.0) || weights.empty() || !(p < 1.0 - weights[0])) {
    throw Error("", "chi-square mixture",
                "the probability must be above 0 and below that of a positive statistic");
  }
  double low = 0.0, high = 1.0;
  while (chi_square_mixture_p(high, weights) > p) {
    high *= 2.0;
  }
  for (int i = 0; i < 100 && high - low > 1e-13 * high; ++i) {
    const double middle = 0.5 * (low + high);
    (chi_square_mixture_p(middle, weights) > p ? low : high) = middle;
  }
  return 0.5 * (low + high);
}

std::vector<double> boundary_weights(std::size_t boundary, std::size_t free) {
  std::vector<double> weights(free + boundary + 1, 0.0);
  double weight = std::ldexp(1.0, -static_cast<int>(boundary));
  for (std::size_t k = 0; k <= boundary; ++k) {
    weights[free + k] = weight;
    weight *= static_cast<double>(boundary - k) / static_cast<double>(k + 1);
  }
  return weights;
}

}  // namespace softsill::metrics

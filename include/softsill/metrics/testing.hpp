#pragma once

/// \file testing.hpp
/// Proportions, counts, families of p-values, paired comparison, parameters on a boundary.

#include <cstddef>
#include <cstdint>
#include <span>
#include <vector>

namespace softsill::metrics {

/// Two ends of an interval for a proportion, a rate or a count.
struct Range {
  double low = 0.0, high = 0.0;
};

/// Score interval for a proportion (Wilson 1927, J. Am. Stat. Assoc. 22:209).
/// \throws Error when there are no trials, or more successes than trials
Range wilson_interval(std::size_t successes, std::size_t trials, double level = 0.95);

/// Exact interval for the mean of a Poisson count (Garwood 1936, Biometrika 28:437).
Range poisson_interval(std::size_t count, double level = 0.95);

/// Adjusted p-values in the order given, each at most 1: Holm (1979, Scand. J. Stat. 6:65) controls
/// the chance of any false rejection. \throws Error on a p-value outside [0, 1]
std::vector<double> holm(std::span<const double> p_values);
/// Benjamini & Hochberg (1995, J. R. Stat. Soc. B 57:289): the share of false rejections.
std::vector<double> benjamini_hochberg(std::span<const double> p_values);

struct SignFlip {
  double mean = 0.0;  ///< of the differences
  double p_value = 1.0;
  bool exact = false;        ///< all sign patterns were tried
  std::size_t patterns = 0;  ///< tried
};

/// Two-sided sign-flip permutation test that paired differences are symmetric about 0, by their
/// mean. Up to 16 differences all sign patterns are tried; beyond that `draws` random ones, and
/// p = (1 + as extreme) / (1 + draws).
/// \throws Error without differences or on differences that are not finite
SignFlip sign_flip_test(std::span<const double> differences, std::size_t draws = 10000,
                        std::uint64_t seed = 1);

/// P(X >= statistic) where X has a chi-square distribution with k degrees of freedom with
/// probability weights[k] (k = 0 is a mass at 0). One parameter on its boundary has {1/2, 1/2}
/// (Self & Liang 1987, J. Am. Stat. Assoc. 82:605). \throws Error unless the weights add up to 1
double chi_square_mixture_p(double statistic, std::span<const double> weights);
/// The value that is exceeded with probability p < 1 - weights[0].
double chi_square_mixture_critical(double p, std::span<const double> weights);
/// Weights for `boundary` independent parameters on their boundary and `free` more that are not:
/// binomial, on free ... free + boundary degrees of freedom.
std::vector<double> boundary_weights(std::size_t boundary, std::size_t free = 0);

}  // namespace softsill::metrics

#pragma once

/// \file rescaling.hpp
/// Time rescaling: under the true hazard the integrals between spikes are standard exponential
/// (Brown et al. 2002, Neural Comput. 14:325). Works on integrated hazards as plain numbers.

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <vector>

namespace softsill::metrics {

/// Rescaled intervals of one trial or of several together.
struct Rescaled {
  std::vector<double> z;  ///< integrals of the hazard over complete intervals
  std::size_t trials = 0;
  std::size_t left_out = 0;  ///< incomplete intervals at the ends of trials, not in z
  std::string edges;         ///< one line: what was done with incomplete intervals

  /// Adds the intervals of another trial.
  void append(const Rescaled& other);
  /// u = 1 - exp(-z), uniform under the true hazard.
  std::vector<double> uniforms() const;
};

/// \param integral_at_spikes   the hazard integrated from the beginning of the trial to each spike
/// \param history_known        the hazard before the first spike is that of a known past, so the
///                             stretch from the beginning to the first spike is an interval too
///                             (by lack of memory its integral is exponential)
/// \throws Error on integrals that are not finite, negative or falling
Rescaled rescale(std::span<const double> integral_at_spikes, bool history_known = false);

/// Coarse rows (Haslinger, Pipa & Brown 2010, Neural Comput. 22:2477): the spike falls somewhere in
/// its row; a uniform draw makes the rescaled intervals exactly exponential again.
/// \param expected  per row: the hazard integrated over it (its probability of a spike is
///                  1 - exp(-expected))
/// \param spike     per row: 1 with a spike, else 0
/// \param seed, stream  of the draws
Rescaled rescale_rows(std::span<const double> expected, std::span<const unsigned char> spike,
                      std::uint64_t seed, std::uint64_t stream = 0, bool history_known = false);

struct KolmogorovSmirnov {
  std::size_t n = 0;
  double statistic = 0.0;  ///< largest distance to the uniform distribution; 0 for n = 0
  double p_value = 1.0;
  double band = 1.0;  ///< the statistic stays below this with probability `level`
  double level = 0.95;
};

/// Two-sided one-sample test of uniformity on [0, 1]. \throws Error on values outside
KolmogorovSmirnov uniform_test(std::span<const double> values, double level = 0.95);

/// P(D_n < d) for uniform values: exact for n <= 300 (Marsaglia, Tsang & Wang 2003, J. Stat. Softw.
/// 8(18)); above, the limit law with the correction of Vrbik (2018) to its argument, within 1e-4.
double kolmogorov_cdf(std::size_t n, double d);
/// The d with kolmogorov_cdf(n, d) = level.
double kolmogorov_quantile(std::size_t n, double level);

/// p-value from statistics of data simulated under the fitted model and fitted again, for
/// parameters that come from the same data: (1 + as large) / (1 + simulations).
/// \throws Error without simulations
double bootstrap_p_value(double statistic, std::span<const double> simulated);

/// Serial dependence of rescaled intervals: correlations of successive Gaussian-transformed values.
struct SerialDependence {
  std::vector<double> correlation;  ///< at lags 1, 2, ...
  double band = 0.0;                ///< normal quantile over sqrt(n): pointwise band
  /// Of the largest absolute correlation, corrected for the number of lags (Sidak 1967).
  double p_value = 1.0;
  double level = 0.95;
};

/// Pairs do not bridge trials. \param trials  rescaled intervals, one span per trial
/// \param lags  at least 1; lags without pairs are left out
SerialDependence serial_dependence(std::span<const std::vector<double>> trials,
                                   std::size_t lags = 5, double level = 0.95);

/// Bits per spike over a constant rate that comes from other data:
/// (L_model - L_constant) / (N ln 2), L_constant = N ln(rate) - rate T.
/// \param log_likelihood     sum of log hazard (1/ms) at the spikes minus its integral
/// \param reference_per_ms   of the estimation sweeps; positive
/// \throws Error without spikes, or on a rate or duration that is not positive
double bits_per_spike(double log_likelihood, std::size_t spikes, double duration_ms,
                      double reference_per_ms);

}  // namespace softsill::metrics

#pragma once

/// \file psth.hpp
/// Rates over time from repeats, and how much of a cell's rate a model's rate explains.

#include <cstddef>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "softsill/metrics/reliability.hpp"
#include "softsill/metrics/train.hpp"

namespace softsill::metrics {

struct PsthSettings {
  enum class Kind {
    bins,     ///< counts in bins of width_ms
    gaussian  ///< Gaussian of standard deviation width_ms, read every step_ms
  };
  Kind kind = Kind::gaussian;
  double width_ms = 5.0;
  double step_ms = 1.0;  ///< gaussian only
};

/// Rate of each trial on a common grid, 1/ms; row-major, trials x bins. Bins cover the window from
/// its beginning; an incomplete last bin is left out. The Gaussian is cut at 5 standard deviations
/// and scaled to weight 1 inside the window, so that rates do not sink at its ends.
struct RateTable {
  std::size_t trials = 0, bins = 0;
  double begin_ms = 0.0, step_ms = 0.0;
  std::vector<double> rates;

  std::span<const double> trial(std::size_t i) const { return {rates.data() + i * bins, bins}; }
  /// Mean over trials: the PSTH, 1/ms.
  std::vector<double> mean() const;
  /// Standard error of the PSTH: standard deviation over trials / sqrt(trials). For simulated
  /// trials this is the Monte Carlo error. \throws Error with fewer than 2 trials
  std::vector<double> standard_error() const;
};

/// \throws Error on widths or steps that are not positive or exceed the window
RateTable rate_table(const TrialSet& set, const PsthSettings& settings = {});
/// "Gaussian, sigma 5 ms" or "bins of 5 ms"
std::string describe(const PsthSettings& settings);

/// Variances over time are taken with 1 / (number of bins).
struct ExplainedVariance {
  /// N Var(mean) - mean Var, over N - 1 (Sahani & Linden 2003, NIPS 15): the part of the variance
  /// that repeats share.
  double signal_power = 0.0;
  double noise_power = 0.0;  ///< mean Var - signal power
  /// 1 - Var(PSTH - model) / Var(PSTH): no noise ceiling.
  std::optional<double> plain;
  /// (Var(PSTH) - Var(PSTH - model)) / signal power (Sahani & Linden 2003); no lower bound.
  std::optional<double> explained;
  std::optional<double> correlation;  ///< of PSTH and model
  /// Cov(PSTH, model) / sqrt(Var(model) signal power) (Schoppe et al. 2016, Front. Comput.
  /// Neurosci. 10:10).
  std::optional<double> normalised_correlation;
  std::optional<double> ceiling;  ///< sqrt(signal power / Var(PSTH))
  std::string absence;            ///< why ratios to the signal power are absent
};

/// \param model_rate  1/ms on the grid of the table
/// \throws Error with fewer than 2 trials or on sizes that differ
ExplainedVariance explained_variance(const RateTable& cell, std::span<const double> model_rate);

/// Covariances over time of the trials of a cell and a model. Their means over different trials
/// are signal power of the cell, covariance of the two PSTHs, and variance of the model's PSTH
/// without its Monte Carlo error; resample them with bootstrap_pairs.
PairTable covariance_table(const RateTable& cell, const RateTable& model);

}  // namespace softsill::metrics

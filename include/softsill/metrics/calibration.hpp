#pragma once

/// \file calibration.hpp
/// Is a predicted hazard right on average where it is high, and where it is low? And is its shape
/// as a function of the distance to threshold the fitted one? Rows are short stretches of time.

#include <cstddef>
#include <optional>
#include <span>
#include <string>
#include <vector>

#include "softsill/metrics/testing.hpp"

namespace softsill::metrics {

struct CalibrationRow {
  double from = 0.0, to = 0.0;  ///< range of the sorting value in the group
  double exposure_ms = 0.0;
  double expected = 0.0;  ///< sum of predicted counts
  std::size_t observed = 0;
  Range observed_range;  ///< exact Poisson interval around the observed count
  bool inside = false;   ///< the expected count lies in it

  double predicted_hz() const { return 1000.0 * expected / exposure_ms; }
  double observed_hz() const { return 1000.0 * static_cast<double>(observed) / exposure_ms; }
};

struct Calibration {
  std::vector<CalibrationRow> groups;
  /// Likelihood ratio of one free rate per group against the prediction,
  /// 2 sum (O ln(O / E) - (O - E)), and its p-value by chi-square.
  double statistic = 0.0;
  double degrees_of_freedom = 0.0;
  double p_value = 1.0;
  std::vector<std::string> warnings;  ///< groups with fewer than 5 expected spikes, ...
};

enum class Grouping {
  equal_exposure,  ///< deciles of the hazard: each group covers the same time
  equal_expected   ///< each group holds the same predicted count: as much evidence in each
};

/// Predicted against observed counts in groups of rising hazard.
/// \param hazard_per_ms  per row, not negative
/// \param exposure_ms    per row, positive
/// \param spikes         per row
/// \param groups         10 are deciles; fewer result when rows are tied or few
/// \throws Error on sizes that differ, no rows, or values out of range
Calibration hazard_calibration(std::span<const double> hazard_per_ms,
                               std::span<const double> exposure_ms,
                               std::span<const unsigned> spikes, std::size_t groups = 10,
                               Grouping grouping = Grouping::equal_exposure, double level = 0.95);

/// Check of the escape function: rows are grouped by x, the distance to threshold in units of
/// Delta, with equal predicted counts, and each group is given a rate of its own. The prediction is
/// tested against that unconstrained function of x.
/// \param fitted_parameters  parameters of the prediction that come from these very rows; taken off
///                           the degrees of freedom. 0 on held-out data.
Calibration escape_check(std::span<const double> x, std::span<const double> hazard_per_ms,
                         std::span<const double> exposure_ms, std::span<const unsigned> spikes,
                         std::size_t groups = 12, double fitted_parameters = 0.0,
                         double level = 0.95);

}  // namespace softsill::metrics

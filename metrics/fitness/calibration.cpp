#include "softsill/metrics/calibration.hpp"

#include <algorithm>
#include <boost/math/special_functions/gamma.hpp>
#include <cmath>
#include <numeric>

#include "softsill/error.hpp"

namespace softsill::metrics {
namespace {

void check(std::span<const double> sorted_by, std::span<const double> hazard,
           std::span<const double> exposure, std::span<const unsigned> spikes, std::size_t groups) {
  if (hazard.empty() || hazard.size() != exposure.size() || hazard.size() != spikes.size() ||
      hazard.size() != sorted_by.size()) {
    throw Error("", "calibration",
                "hazard, exposure and spikes must have the same number of rows, at least one");
  }
  if (groups == 0) {
    throw Error("", "calibration", "it needs at least one group");
  }
  for (std::size_t i = 0; i < hazard.size(); ++i) {
    if (!(hazard[i] >= 0.0) || !std::isfinite(hazard[i]) || !(exposure[i] > 0.0) ||
        !std::isfinite(exposure[i]) || std::isnan(sorted_by[i])) {
      throw Error("", "calibration, row " + std::to_string(i + 1),
                  "the hazard must not be negative and the exposure must be positive");
    }
  }
}

Calibration grouped(std::span<const double> sorted_by, std::span<const double> hazard,
                    std::span<const double> exposure, std::span<const unsigned> spikes,
                    std::size_t groups, Grouping grouping, double fitted_parameters, double level) {
  check(sorted_by, hazard, exposure, spikes, groups);
  std::vector<std::size_t> order(hazard.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::stable_sort(order.begin(), order.end(),
                   [&](std::size_t a, std::size_t b) { return sorted_by[a] < sorted_by[b]; });
  const auto share = [&](std::size_t row) {
    return grouping == Grouping::equal_exposure ? exposure[row] : hazard[row] * exposure[row];
  };
  double total = 0.0;
  for (std::size_t row = 0; row < hazard.size(); ++row) {
    total += share(row);
  }
  Calibration result;
  double seen = 0.0;
  std::size_t next = 0;
  for (std::size_t group = 1; group <= groups && next < order.size(); ++group) {
    const double until = total * static_cast<double>(group) / static_cast<double>(groups);
    CalibrationRow row;
    row.from = sorted_by[order[next]];
    const std::size_t begin = next;
    while (next < order.size()) {
      const std::size_t candidate = order[next];
      // Half of a row must lie below the limit; rows with one value stay together.
      const bool tied = next > begin && sorted_by[candidate] == row.to;
      if (group < groups && !tied && seen + 0.5 * share(candidate) > until) {
        break;
      }
      row.to = sorted_by[candidate];
      row.exposure_ms += exposure[candidate];
      row.expected += hazard[candidate] * exposure[candidate];
      row.observed += spikes[candidate];
      seen += share(candidate);
      ++next;
    }
    if (next == begin) {
      continue;
    }
    row.observed_range = poisson_interval(row.observed, level);
    row.inside = row.observed_range.low <= row.expected && row.expected <= row.observed_range.high;
    result.groups.push_back(row);
  }
  std::size_t thin = 0;
  for (const CalibrationRow& row : result.groups) {
    const auto observed = static_cast<double>(row.observed);
    result.statistic -= 2.0 * (observed - row.expected);
    if (row.observed > 0) {
      result.statistic += 2.0 * observed * std::log(observed / row.expected);
    }
    thin += row.expected < 5.0;
  }
  result.degrees_of_freedom = static_cast<double>(result.groups.size()) - fitted_parameters;
  if (result.degrees_of_freedom > 0.0) {
    result.p_value = std::isinf(result.statistic)
                         ? 0.0
                         : boost::math::gamma_q(0.5 * result.degrees_of_freedom,
                                                0.5 * std::max(0.0, result.statistic));
  } else {
    result.warnings.push_back("more parameters were fitted than there are groups: no test");
  }
  if (thin > 0) {
    result.warnings.push_back(std::to_string(thin) + " of " + std::to_string(result.groups.size()) +
                              " groups expect fewer than 5 spikes: the p-value is approximate");
  }
  return result;
}

}  // namespace

Calibration hazard_calibration(std::span<const double> hazard_per_ms,
                               std::span<const double> exposure_ms,
                               std::span<const unsigned> spikes, std::size_t groups,
                               Grouping grouping, double level) {
  return grouped(hazard_per_ms, hazard_per_ms, exposure_ms, spikes, groups, grouping, 0.0, level);
}

Calibration escape_check(std::span<const double> x, std::span<const double> hazard_per_ms,
                         std::span<const double> exposure_ms, std::span<const unsigned> spikes,
                         std::size_t groups, double fitted_parameters, double level) {
  if (!(fitted_parameters >= 0.0)) {
    throw Error("", "escape-function check", "the number of fitted parameters is negative");
  }
  return grouped(x, hazard_per_ms, exposure_ms, spikes, groups, Grouping::equal_expected,
                 fitted_parameters, level);
}

}  // namespace softsill::metrics

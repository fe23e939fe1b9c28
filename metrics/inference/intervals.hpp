#pragma once

#include <span>
#include <utility>

#include "softsill/metrics/bootstrap.hpp"

namespace softsill::metrics::inner {

/// All that turns sorted replicates into ends. For studentised intervals the sorted values are
/// (replicate - estimate) / its standard error.
struct Recipe {
  IntervalMethod method = IntervalMethod::bca;
  double level = 0.95;
  double estimate = 0.0;
  double acceleration = 0.0;
  double error = 0.0;
};

/// Order statistic (R + 1) * level, interpolated between neighbours on the scale of normal
/// quantiles (Davison & Hinkley 1997, eq. 5.8); the outermost one beyond the ends.
double normal_scale_quantile(std::span<const double> sorted, double level);

/// Share of values below the estimate, ties counted half.
double share_below(std::span<const double> sorted, double estimate);

/// Levels of the two order statistics, low end first.
std::pair<double, double> levels(const Recipe& recipe, double z_0);

std::pair<double, double> ends(std::span<const double> sorted, const Recipe& recipe);

}  // namespace softsill::metrics::inner

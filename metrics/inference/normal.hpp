#pragma once

#include <boost/math/special_functions/erf.hpp>
#include <cmath>
#include <limits>
#include <numbers>

namespace softsill::metrics {

inline double normal_cdf(double x) { return 0.5 * std::erfc(-x / std::numbers::sqrt2); }

/// \param p  0 and 1 give -infinity and infinity
inline double normal_quantile(double p) {
  if (p <= 0.0 || p >= 1.0) {
    return p <= 0.0 ? -std::numeric_limits<double>::infinity()
                    : std::numeric_limits<double>::infinity();
  }
  return -std::numbers::sqrt2 * boost::math::erfc_inv(2.0 * p);
}

}  // namespace softsill::metrics

#pragma once

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <vector>

namespace softsill {

/// sqrt(n) times the Kolmogorov distance.
template <typename Law>
double kolmogorov(std::vector<double> sample, Law law) {
  std::sort(sample.begin(), sample.end());
  const double n = static_cast<double>(sample.size());
  double distance = 0.0;
  for (std::size_t i = 0; i < sample.size(); ++i) {
    const double p = law(sample[i]), place = static_cast<double>(i);
    distance = std::max({distance, (place + 1.0) / n - p, p - place / n});
  }
  return distance * std::sqrt(n);
}

/// sqrt(n) D passes this with probability 2 exp(-2 * 1.95^2) = 1e-3 under the right law (Kolmogorov
/// 1933); with fixed seeds the outcome is fixed too.
constexpr double kolmogorov_limit = 1.95;

}  // namespace softsill

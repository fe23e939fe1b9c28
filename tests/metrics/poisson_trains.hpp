#pragma once

#include <algorithm>
#include <cstdint>
#include <functional>
#include <vector>

#include "softsill/metrics/train.hpp"
#include "softsill/random.hpp"

namespace softsill::metrics {

/// Homogeneous Poisson train.
inline std::vector<double> poisson_train(double rate_hz, double length_ms, RandomStream& random) {
  std::vector<double> train;
  for (double t = random.exponential() * 1000.0 / rate_hz; t < length_ms;
       t += random.exponential() * 1000.0 / rate_hz) {
    train.push_back(t);
  }
  return train;
}

/// Inhomogeneous Poisson trains by thinning; `rate_hz` of time in ms, at most `largest_hz`.
inline TrialSet modulated_trials(std::size_t trials, double length_ms, double largest_hz,
                                 const std::function<double(double)>& rate_hz,
                                 RandomStream& random) {
  TrialSet set{{}, {0.0, length_ms}};
  for (std::size_t i = 0; i < trials; ++i) {
    std::vector<double> kept;
    for (const double t : poisson_train(largest_hz, length_ms, random)) {
      if (random.uniform() * largest_hz < rate_hz(t)) {
        kept.push_back(t);
      }
    }
    set.trains_ms.push_back(kept);
  }
  return set;
}

}  // namespace softsill::metrics

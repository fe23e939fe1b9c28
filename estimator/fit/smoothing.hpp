#pragma once

/// \file smoothing.hpp
/// Smoothing parameters by Laplace approximate marginal likelihood (Wood 2011, JRSS B 73:3):
///   V(rho) = log L - 1/2 theta^T S theta + 1/2 log |S|_+ - 1/2 log |H + S| + M/2 log 2 pi.

#include <functional>
#include <string>

#include "estimator/fit/ceres_minimizer.hpp"

namespace softsill {

struct SmoothingOptions {
  /// Stop when no |dV/d log lambda| exceeds this (nats per unit of log lambda).
  double gradient = 0.05;
  int rounds = 60;
  /// false leaves out the neglected term (plain Fellner-Schall): cheaper, a little off the maximum.
  bool exact = true;
  MinimizerOptions minimizer;
  std::function<bool(int round)> progress;  ///< false stops
};

struct Smoothed {
  Minimum minimum;            ///< at the chosen smoothing parameters
  double log_marginal = 0.0;  ///< V
  bool settled = false;       ///< gradient reached
  int rounds = 0;
};

/// Chooses every penalty with chosen == true and leaves them set in `objective`.
///
/// Generalised Fellner-Schall steps (Wood & Fasiolo 2017, Biometrics 73:1071) with the term that
/// they neglect, tr((H + S)^-1 dH/d log lambda), added from a directional difference of H, so that
/// their fixed point is the maximum of V and not a neighbour of it.
Smoothed choose_smoothing(Penalised& objective, const Vector& start,
                          const SmoothingOptions& options);

/// V at a minimum.
double log_marginal_likelihood(const Penalised& objective, const Minimum& minimum);

}  // namespace softsill

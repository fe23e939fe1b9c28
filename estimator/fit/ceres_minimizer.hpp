#pragma once

/// \file ceres_minimizer.hpp
/// The one door to Ceres Solver, and the gate that its word has to pass.

#include <functional>
#include <string>
#include <vector>

#include "estimator/fit/objective.hpp"

namespace softsill {

struct MinimizerOptions {
  int max_iterations = 200;
  /// Stop once the Newton decrement (nats) is below this: the gap to the optimum, in
  /// log-likelihood.
  /// Rounding of a large likelihood is allowed for on top.
  double decrement = 1e-9;
  /// Coordinates held at their start; empty: none.
  std::vector<bool> fixed;
  /// Called after every iteration; false stops with `interrupted`.
  std::function<bool()> keep_going;
};

/// What the gate found at the last point. Nothing here comes from the optimiser's own report.
struct Minimum {
  Vector theta;
  double value = 0.0;
  Vector gradient;         ///< of all coordinates
  Matrix hessian;          ///< observed, of all coordinates
  double decrement = 0.0;  ///< 1/2 g^T H^-1 g over the free coordinates, nats
  bool finite = false;     ///< start and end have finite values
  bool positive_definite = false;
  bool interrupted = false;
  int iterations = 0;
  std::string report;  ///< what Ceres said
  /// decrement < limit, positive definite, finite.
  bool passed(double limit = 1e-6) const {
    return finite && positive_definite && decrement < limit;
  }
};

/// Minimises by Ceres' trust region on the exact function: one cost with residual
/// (sqrt(2 (f - c)), 0, ..., 0) and Jacobian (g^T / r_0 ; chol(H)^T), so that its cost is f - c,
/// its gradient g and its model Hessian H plus a small rank-one term. H is the observed information
/// where that is positive definite, the expected one elsewhere. The end is polished by damped
/// Newton steps and judged by the gate.
/// The last part of the gate: do values of the function, not only its derivatives, say that this is
/// a minimum? Steps of a fraction of a standard error both ways along three fixed directions must
/// raise the value as the Hessian predicts, and equally. A gradient that is wrong by a constant
/// passes the Newton decrement at its own wrong zero; it does not pass this.
bool values_agree(Objective& objective, const Minimum& minimum, const std::vector<bool>& fixed);

Minimum minimize(Objective& objective, const Vector& start, const MinimizerOptions& options = {});

}  // namespace softsill

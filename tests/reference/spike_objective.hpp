#pragma once

// A design made by a test, as something to minimise.

#include <Eigen/Cholesky>
#include <cmath>
#include <cstdio>
#include <limits>
#include <utility>

#include "estimator/fit/ceres_minimizer.hpp"
#include "estimator/fit/objective.hpp"

namespace softsill::reference {

/// Minus the spike log-likelihood as a function of beta alone.
class SpikeObjective : public Objective {
 public:
  SpikeObjective(SpikeDesign design, Escape escape) : design_(std::move(design)), escape_(escape) {}
  Eigen::Index size() const override { return design_.width(); }
  Evaluated evaluate(const Vector& beta, Want want) override {
    const Eigen::Index n = size();
    const SpikeEvaluation spikes = evaluate_spikes(design_, escape_, beta, want, 1);
    Evaluated out;
    out.value = -spikes.log_likelihood;
    if (want != Want::value) {
      out.gradient = -spikes.gradient.head(n);
    }
    if (want == Want::derivatives || want == Want::derivatives_and_expected) {
      out.hessian = spikes.information.topLeftCorner(n, n);
    }
    if (want == Want::derivatives_and_expected) {
      out.expected = spikes.expected.topLeftCorner(n, n);
    }
    return out;
  }
  const SpikeDesign& design() const { return design_; }

 private:
  SpikeDesign design_;
  Escape escape_;
};

/// Standard errors from an information matrix.
inline Vector standard_errors(const Matrix& information) {
  return information.llt()
      .solve(Matrix::Identity(information.rows(), information.cols()))
      .diagonal()
      .cwiseSqrt();
}

/// Largest |a - b| / |b| over all numbers.
inline double worst_relative(const Vector& a, const std::vector<double>& b) {
  if (a.size() != static_cast<Eigen::Index>(b.size())) {
    return std::numeric_limits<double>::infinity();
  }
  double worst = 0.0;
  for (Eigen::Index i = 0; i < a.size(); ++i) {
    const double other = b[static_cast<std::size_t>(i)];
    worst = std::max(worst, std::abs(a[i] - other) / std::abs(other));
  }
  return worst;
}

/// Standard errors by which a minimum may miss the true one: a likelihood is a sum that carries
/// some 1e-14 of itself as rounding, so that is where a maximisation stops, and a decrement d is a
/// distance of sqrt(2 d).
inline double rounding_in_errors(const Minimum& minimum) {
  return std::sqrt(2e-14 * std::abs(minimum.value));
}

/// One Newton step further than where rounding of the value lets a minimisation stop: gradients
/// tell more digits than values do.
inline Vector one_step_further(const Minimum& minimum) {
  return minimum.theta - minimum.hessian.llt().solve(minimum.gradient);
}

/// Says how close it was: a bound alone hides a slow drift towards it.
inline double measured(const char* what, double difference) {
  std::printf("measured: %s %.2e\n", what, difference);
  return difference;
}

}  // namespace softsill::reference

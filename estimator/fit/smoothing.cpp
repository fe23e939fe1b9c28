#include "estimator/fit/smoothing.hpp"

#include <Eigen/Cholesky>
#include <algorithm>
#include <cmath>
#include <numbers>

namespace softsill {
namespace {

constexpr double lowest_log_lambda = -25.0, highest_log_lambda = 25.0;
constexpr double longest_step = 3.0;

/// dV / d log lambda of each chosen penalty, and the two sides of the fixed point.
struct Slopes {
  Vector gradient;   ///< nats
  Vector wanted;     ///< rank - tr(V lambda S) - tr(V dH)
  Vector roughness;  ///< theta^T lambda S theta
};

Slopes slopes_at(Penalised& objective, const Minimum& minimum,
                 const std::vector<std::size_t>& chosen, bool exact, bool central) {
  const Eigen::Index p = minimum.theta.size();
  const Eigen::LLT<Matrix> factor(minimum.hessian);
  const Matrix covariance = factor.solve(Matrix::Identity(p, p));
  const Matrix unpenalised = minimum.hessian - objective.penalty_matrix();
  const auto n = static_cast<Eigen::Index>(chosen.size());
  Slopes out{Vector(n), Vector(n), Vector(n)};
  for (Eigen::Index j = 0; j < n; ++j) {
    const Penalty& penalty = objective.penalties()[chosen[static_cast<std::size_t>(j)]];
    const auto first = static_cast<Eigen::Index>(penalty.first);
    const Eigen::Index size = penalty.matrix.rows();
    const Matrix scaled = penalty.lambda * penalty.matrix;
    const Vector c = minimum.theta.segment(first, size);
    const double trace = covariance.block(first, first, size, size).cwiseProduct(scaled).sum();
    double drift = 0.0;
    if (exact) {
      // d theta / d log lambda = -V lambda S theta; H moves along it.
      Vector pull = Vector::Zero(p);
      pull.segment(first, size) = scaled * c;
      const Vector direction = -covariance * pull;
      const double scale = direction.cwiseQuotient(covariance.diagonal().cwiseSqrt()).norm();
      if (scale > 1e-12) {
        const double h = 1e-3 / scale;
        auto hessian_at = [&](double step) {
          return objective.likelihood()
              .evaluate(minimum.theta + step * direction, Want::derivatives)
              .hessian;
        };
        const Matrix up = hessian_at(h);
        drift = central ? covariance.cwiseProduct(up - hessian_at(-h)).sum() / (2.0 * h)
                        : covariance.cwiseProduct(up - unpenalised).sum() / h;
      }
    }
    out.roughness[j] = c.dot(scaled * c);
    out.wanted[j] = static_cast<double>(penalty.rank) - trace - drift;
    out.gradient[j] = 0.5 * (out.wanted[j] - out.roughness[j]);
  }
  return out;
}

}  // namespace

double log_marginal_likelihood(const Penalised& objective, const Minimum& minimum) {
  const Eigen::LLT<Matrix> factor(minimum.hessian);
  const double log_determinant = 2.0 * Matrix(factor.matrixL()).diagonal().array().log().sum();
  double prior = 0.0;
  Eigen::Index penalised = 0;
  for (const Penalty& penalty : objective.penalties()) {
    prior += static_cast<double>(penalty.rank) * std::log(penalty.lambda) + penalty.log_determinant;
    penalised += penalty.rank;
  }
  return -minimum.value + 0.5 * prior - 0.5 * log_determinant +
         0.5 * static_cast<double>(objective.size() - penalised) * std::log(2.0 * std::numbers::pi);
}

Smoothed choose_smoothing(Penalised& objective, const Vector& start,
                          const SmoothingOptions& options) {
  std::vector<std::size_t> chosen;
  for (std::size_t i = 0; i < objective.penalties().size(); ++i) {
    if (objective.penalties()[i].chosen) {
      chosen.push_back(i);
    }
  }
  Smoothed out;
  // Steps on the way need the minimum only to where the slopes stop changing.
  const bool tight = options.gradient < 1e-3;
  MinimizerOptions rough = options.minimizer;
  rough.decrement = std::max(rough.decrement, tight ? 0.0 : 1e-5);
  out.minimum = minimize(objective, start, rough);
  out.settled = chosen.empty();
  const auto n = static_cast<Eigen::Index>(chosen.size());
  Vector last_step = Vector::Zero(n), last_gradient = Vector::Zero(n);
  // Plain steps come first: far from the end the neglected term does not change their direction.
  bool exact = false;
  for (int round = 0; round < options.rounds && !chosen.empty(); ++round) {
    out.rounds = round + 1;
    if (!out.minimum.finite || !out.minimum.positive_definite || out.minimum.interrupted ||
        (options.progress && !options.progress(round))) {
      break;
    }
    const Slopes slopes = slopes_at(objective, out.minimum, chosen, exact, tight);
    double worst = 0.0;
    for (Eigen::Index j = 0; j < n; ++j) {
      const double log_lambda =
          std::log(objective.penalties()[chosen[static_cast<std::size_t>(j)]].lambda);
      // On the edge only the way back counts.
      const bool stuck = (log_lambda >= highest_log_lambda && slopes.gradient[j] > 0.0) ||
                         (log_lambda <= lowest_log_lambda && slopes.gradient[j] < 0.0);
      worst = std::max(worst, stuck ? 0.0 : std::abs(slopes.gradient[j]));
    }
    if (worst < options.gradient && (exact || !options.exact)) {
      out.settled = true;
      break;
    }
    if (worst < 10.0 * options.gradient && !exact && options.exact) {
      exact = true;
      last_step.setZero();
      continue;
    }
    for (Eigen::Index j = 0; j < n; ++j) {
      Penalty& penalty = objective.penalties()[chosen[static_cast<std::size_t>(j)]];
      double step = slopes.wanted[j] > 0.0 && slopes.roughness[j] > 0.0
                        ? std::log(slopes.wanted[j] / slopes.roughness[j])
                        : (slopes.gradient[j] > 0.0 ? 1.0 : -1.0);
      // The fixed point is approached by a constant factor: one secant step takes out most of it.
      const double change = slopes.gradient[j] - last_gradient[j];
      if (exact && last_step[j] != 0.0 && change * last_step[j] < 0.0) {
        const double secant = -slopes.gradient[j] * last_step[j] / change;
        if (std::abs(secant) < 6.0 * std::abs(step)) {
          step = secant;
        }
      }
      step = std::clamp(step, -longest_step, longest_step);
      const double log_lambda =
          std::clamp(std::log(penalty.lambda) + step, lowest_log_lambda, highest_log_lambda);
      last_step[j] = log_lambda - std::log(penalty.lambda);
      penalty.lambda = std::exp(log_lambda);
    }
    last_gradient = slopes.gradient;
    out.minimum = minimize(objective, out.minimum.theta, rough);
  }
  if (rough.decrement > options.minimizer.decrement && out.minimum.finite &&
      !out.minimum.interrupted) {
    out.minimum = minimize(objective, out.minimum.theta, options.minimizer);
  }
  if (out.minimum.finite && out.minimum.positive_definite) {
    out.log_marginal = log_marginal_likelihood(objective, out.minimum);
  }
  return out;
}

}  // namespace softsill

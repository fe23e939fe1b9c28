#include "estimator/fit/uncertainty.hpp"

#include <Eigen/Cholesky>
#include <algorithm>
#include <boost/math/distributions/normal.hpp>
#include <cmath>

namespace softsill {
namespace {

constexpr double reach_in_standard_errors = 12.0;

}  // namespace

Matrix inverse_information(const Matrix& hessian, const std::vector<bool>& fixed) {
  std::vector<Eigen::Index> free;
  for (Eigen::Index i = 0; i < hessian.rows(); ++i) {
    if (fixed.empty() || !fixed[static_cast<std::size_t>(i)]) {
      free.push_back(i);
    }
  }
  const Matrix part = hessian(free, free);
  const auto n = static_cast<Eigen::Index>(free.size());
  // Unit diagonal first: coordinates differ by many orders of magnitude.
  const Vector scale = part.diagonal().cwiseMax(1e-300).cwiseSqrt().cwiseInverse();
  const Matrix scaled = scale.asDiagonal() * part * scale.asDiagonal();
  const Matrix inverse = scaled.ldlt().solve(Matrix::Identity(n, n));
  Matrix out = Matrix::Zero(hessian.rows(), hessian.cols());
  out(free, free) =
      scale.asDiagonal() * (0.5 * (inverse + inverse.transpose())) * scale.asDiagonal();
  return out;
}

Matrix sandwich_covariance(const Matrix& covariance, const Matrix& scores) {
  const Eigen::RowVectorXd mean = scores.colwise().mean();
  const Matrix centred = scores.rowwise() - mean;
  // Blocks are few: the usual small-sample factor of a covariance around an estimated mean.
  const double n = static_cast<double>(scores.rows());
  const Matrix middle = (n / std::max(n - 1.0, 1.0)) * (centred.transpose() * centred);
  return covariance * middle * covariance;
}

double normal_quantile_for(double level) {
  return boost::math::quantile(boost::math::normal(), 0.5 + 0.5 * level);
}

double delta_standard_error(const Vector& gradient, const Matrix& covariance) {
  return std::sqrt(std::max(0.0, gradient.dot(covariance * gradient)));
}

ProfileInterval profile_interval(Objective& objective, const Minimum& minimum,
                                 const Matrix& covariance, Eigen::Index coordinate, double level,
                                 const MinimizerOptions& options) {
  const double target = normal_quantile_for(level);
  const double error = std::sqrt(covariance(coordinate, coordinate));
  const double best = minimum.theta[coordinate];
  // How the others follow when this one is moved, to first order.
  const Vector follow = covariance.col(coordinate) / covariance(coordinate, coordinate);
  MinimizerOptions inner = options;
  inner.fixed.resize(static_cast<std::size_t>(minimum.theta.size()), false);
  inner.fixed[static_cast<std::size_t>(coordinate)] = true;
  inner.decrement = 1e-6;  // the root is needed to a few digits only
  ProfileInterval interval;
  for (int side : {-1, 1}) {
    // Signed root of twice the likelihood loss: near linear in the coordinate.
    double inside = 0.0, root_inside = 0.0;
    double trial = target * error;
    Vector start = minimum.theta;
    double start_at = 0.0;
    for (int attempt = 0; attempt < 12; ++attempt) {
      trial = std::min(trial, reach_in_standard_errors * error);
      Vector from = start + side * (trial - start_at) * follow;
      from[coordinate] = best + side * trial;
      const Minimum there = minimize(objective, from, inner);
      ++interval.fits;
      if (!there.finite || there.interrupted) {
        break;
      }
      const double root = std::sqrt(std::max(0.0, 2.0 * (there.value - minimum.value)));
      if (std::abs(root - target) < 2e-3) {
        (side < 0 ? interval.low : interval.high) = best + side * trial;
        break;
      }
      start = there.theta;
      start_at = trial;
      const double slope =
          std::abs(trial - inside) > 0.0 ? (root - root_inside) / (trial - inside) : 0.0;
      if (root < target && trial >= reach_in_standard_errors * error) {
        break;  // unbounded on this side
      }
      const double next = slope > 0.0 ? trial + (target - root) / slope : 2.0 * trial;
      inside = trial;
      root_inside = root;
      trial = std::clamp(next, 0.05 * error, 2.0 * std::max(trial, error));
    }
  }
  // Leave the objective (its columns follow the time constants) where it was found.
  objective.evaluate(minimum.theta, Want::value);
  return interval;
}

}  // namespace softsill

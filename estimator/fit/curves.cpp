#include <algorithm>
#include <cmath>

#include "estimator/fit/cell_fit.hpp"

namespace softsill {
namespace {

constexpr int curve_points = 160;

/// Lags dense near 0, as the bases are.
std::vector<double> curve_lags(double from_ms, double support_ms) {
  std::vector<double> lags;
  const double scale = 1.0;
  const double low = std::log1p(from_ms / scale), high = std::log1p(support_ms / scale);
  for (int i = 0; i < curve_points; ++i) {
    lags.push_back(scale * std::expm1(low + (high - low) * i / (curve_points - 1)));
  }
  lags.front() = from_ms;
  lags.back() = support_ms;
  return lags;
}

/// Share of the prior (smoothing) variance that the data have left at each lag; stretches where
/// that is more than half are the smoothing's, not the data's.
std::vector<Interval> undetermined_lags(const CellFit& fit, const KernelPart& part,
                                        const std::vector<double>& lags) {
  std::vector<Interval> stretches;
  const Penalty* penalty = nullptr;
  for (const Penalty& each : fit.penalised->penalties()) {
    if (each.first == part.first && each.rank == static_cast<Eigen::Index>(part.size())) {
      penalty = &each;
    }
  }
  if (penalty == nullptr) {
    return stretches;
  }
  const auto n = static_cast<Eigen::Index>(part.size());
  const auto first = static_cast<Eigen::Index>(part.first);
  const Matrix prior = (penalty->lambda * penalty->matrix).ldlt().solve(Matrix::Identity(n, n));
  const Matrix posterior = fit.covariance.block(first, first, n, n);
  std::vector<double> at(part.size());
  bool open = false;
  for (double lag : lags) {
    part.basis.values(lag, at);
    const Eigen::Map<const Vector> phi(at.data(), n);
    const double before = phi.dot(prior * phi);
    const bool free = before > 0.0 && lag < 0.98 * part.basis.support_ms &&
                      phi.dot(posterior * phi) > 0.5 * before;
    if (free && !open) {
      stretches.push_back({lag, lag});
    }
    if (free) {
      stretches.back().end_ms = lag;
    }
    open = free;
  }
  return stretches;
}

double effective_degrees(const CellFit& fit, const KernelPart& part) {
  double free = 0.0;
  const auto first = static_cast<Eigen::Index>(part.first);
  const auto n = static_cast<Eigen::Index>(part.size());
  free += static_cast<double>(n);
  for (const Penalty& penalty : fit.penalised->penalties()) {
    const auto at = static_cast<Eigen::Index>(penalty.first);
    const Eigen::Index size = penalty.matrix.rows();
    if (at >= first && at + size <= first + n) {
      free -=
          (fit.covariance.block(at, at, size, size).cwiseProduct(penalty.lambda * penalty.matrix))
              .sum();
    }
  }
  return free;
}

KernelCurve curve_of(const CellFit& fit, const Reading& reading, const KernelPart& part,
                     const std::string& unit, double z) {
  KernelCurve curve;
  curve.kernel = part.name;
  curve.unit = unit;
  const double from = part.name == "kappa" ? 0.0 : fit.exposure.refractory_ms;
  curve.lag_ms = curve_lags(std::min(from, 0.5 * part.basis.support_ms), part.basis.support_ms);
  for (double lag : curve.lag_ms) {
    const Derived point = reading.curve(part, lag);
    const double error = reading.standard_error(point, fit.covariance);
    curve.value.push_back(point.value);
    curve.low.push_back(point.value - z * error);
    curve.high.push_back(point.value + z * error);
  }
  curve.effective_degrees_of_freedom = effective_degrees(fit, part);
  for (const Penalty& penalty : fit.penalised->penalties()) {
    if (penalty.first == part.first && part.penalised()) {
      curve.smoothing = penalty.lambda;
    }
  }
  curve.undetermined = undetermined_lags(fit, part, curve.lag_ms);
  return curve;
}

}  // namespace

KernelCurve absent_curve(const std::string& name, const std::string& why) {
  KernelCurve curve;
  curve.kernel = name;
  curve.why_absent = why;
  return curve;
}

void describe_curves(const CellFit& fit, const Reading& reading, double z, Estimate& estimate) {
  const char* left_out = "not part of this variant";
  for (const char* name : {"kappa", "eta", "theta_1"}) {
    const KernelPart* part = fit.coordinates().part(name);
    const bool kappa = std::string(name) == "kappa";
    if (part != nullptr) {
      estimate.kernels.push_back(curve_of(
          fit, reading, *part, kappa ? reading.kappa_unit() : reading.potential_unit(), z));
    } else if (fit.joint() || kappa) {
      estimate.kernels.push_back(absent_curve(name, left_out));
    } else {
      estimate.kernels.push_back(
          absent_curve(name, fit.coordinates().part("eta_minus_theta_1") == nullptr
                                 ? left_out
                                 : "spikes alone see only the difference eta - theta_1"));
    }
  }
  if (const KernelPart* part = fit.coordinates().part("eta_minus_theta_1")) {
    estimate.kernels.push_back(curve_of(fit, reading, *part, reading.potential_unit(), z));
  }
  double total = static_cast<double>(fit.coordinates().size());
  for (const Penalty& penalty : fit.penalised->penalties()) {
    const auto at = static_cast<Eigen::Index>(penalty.first);
    const Eigen::Index size = penalty.matrix.rows();
    total -= fit.covariance.block(at, at, size, size)
                 .cwiseProduct(penalty.lambda * penalty.matrix)
                 .sum();
  }
  for (bool held : fit.fixed) {
    total -= held ? 1.0 : 0.0;
  }
  estimate.effective_degrees_of_freedom = total;
}

}  // namespace softsill

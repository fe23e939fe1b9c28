#include <Eigen/QR>
#include <algorithm>
#include <cmath>

#include "estimator/fit/cell_fit.hpp"

namespace softsill {
namespace {

/// Lags at which two bases are compared, denser near 0 as the bases are.
std::vector<double> comparison_lags(double support_ms) {
  std::vector<double> lags;
  for (int i = 0; i < 200; ++i) {
    lags.push_back(0.2 * std::expm1(std::log1p(support_ms / 0.2) * i / 200.0));
  }
  return lags;
}

/// Least-squares coefficients of `to` for a curve given by `from`.
Vector project(const Basis& from, const Vector& coefficients, const Basis& to) {
  const std::vector<double> lags = comparison_lags(std::max(from.support_ms, to.support_ms));
  const auto rows = static_cast<Eigen::Index>(lags.size());
  Matrix design(rows, static_cast<Eigen::Index>(to.size()));
  Vector target(rows);
  std::vector<double> at_from(from.size()), at_to(to.size());
  for (Eigen::Index i = 0; i < rows; ++i) {
    from.values(lags[static_cast<std::size_t>(i)], at_from);
    to.values(lags[static_cast<std::size_t>(i)], at_to);
    design.row(i) = Eigen::Map<const Eigen::RowVectorXd>(at_to.data(), design.cols());
    target[i] = coefficients.dot(
        Eigen::Map<const Vector>(at_from.data(), static_cast<Eigen::Index>(at_from.size())));
  }
  return design.completeOrthogonalDecomposition().solve(target);
}

/// Affine map x_new = shift + slope x_exp under which an escape function has the exponential's
/// log hazard and its slope at the level where spikes happen.
struct EscapeMap {
  double shift = 0.0, slope = 1.0;
};

EscapeMap map_from_exponential(const Escape& escape, double log_rate) {
  if (escape.kind == EscapeKind::exponential) {
    return {-std::log(escape.lambda_0_per_ms), 1.0};
  }
  // A bounded rate cannot follow above its ceiling; stay where it still bends.
  double low = -40.0, high = 40.0;
  const double ceiling = escape_log_rate(escape, 1.0);
  const double wanted = std::min(log_rate, ceiling);
  for (int i = 0; i < 100; ++i) {
    const double middle = 0.5 * (low + high);
    (escape_log_rate(escape, middle) < wanted ? low : high) = middle;
  }
  const double x = 0.5 * (low + high);
  const double slope = 1.0 / std::max(escape_at(escape, x).log_x, 1e-3);
  return {x - slope * log_rate, slope};
}

Eigen::VectorBlock<Vector> coefficients_of(Vector& theta, const KernelPart& part) {
  return theta.segment(static_cast<Eigen::Index>(part.first),
                       static_cast<Eigen::Index>(part.size()));
}

Vector coefficients_of(const Vector& theta, const KernelPart& part) {
  return theta.segment(static_cast<Eigen::Index>(part.first),
                       static_cast<Eigen::Index>(part.size()));
}

}  // namespace

Vector starting_values(const Coordinates& target, const Coordinates& pilot,
                       const Minimum& pilot_minimum, const VoltageFit* voltage,
                       const Vector& pilot_predictor_at_spikes, const Vector& nonlinear) {
  Vector theta = target.neutral_start();
  for (std::size_t i = 0; i < target.size(); ++i) {
    const std::string& name = target.names()[i];
    if (target.is_time_constant(i) || name == "log_lambda_0" || name == "log_exponent") {
      theta[static_cast<Eigen::Index>(i)] = nonlinear[static_cast<Eigen::Index>(i)];
    }
  }
  const Escape escape = target.map(theta).escape;
  const EscapeMap escape_map = map_from_exponential(escape, pilot_predictor_at_spikes.mean());
  const Vector& found = pilot_minimum.theta;
  const double constant = escape_map.shift + escape_map.slope * found[0];
  if (!target.joint()) {
    theta[0] = constant;
    for (const KernelPart& part : target.parts()) {
      const KernelPart* from = pilot.part(part.name);
      coefficients_of(theta, part) =
          escape_map.slope * project(from->basis, coefficients_of(found, *from), part.basis);
    }
    return theta;
  }
  // The potential alone gives E_0, kappa and eta.
  theta[0] = voltage->v[0];
  for (const KernelPart& part : target.parts()) {
    if (part.voltage_block >= 0) {
      const Eigen::Index first = target.voltage_column(part);
      coefficients_of(theta, part) =
          voltage->v.segment(first, static_cast<Eigen::Index>(part.size()));
    }
  }
  if (const std::ptrdiff_t at = target.index("R_s"); at >= 0) {
    theta[at] = voltage->v[voltage->v.size() - 1];
  }
  theta[target.index("log_sigma")] = voltage->log_sigma;
  theta[target.index("atanh_rho")] = voltage->atanh_rho;
  // The spikes give kappa / Delta: their ratio is b.
  double b = 0.5;
  if (const KernelPart* kappa = target.part("kappa")) {
    const KernelPart* by_spikes = pilot.part("kappa");
    const Vector k = escape_map.slope *
                     project(by_spikes->basis, coefficients_of(found, *by_spikes), kappa->basis);
    const Vector mv = coefficients_of(theta, *kappa);
    const auto n = static_cast<Eigen::Index>(kappa->size());
    // Both curves as functions of the lag, weighted by the lag they stand for.
    const std::vector<double> lags = comparison_lags(kappa->basis.support_ms);
    Matrix metric = Matrix::Zero(n, n);
    std::vector<double> at(kappa->size());
    for (std::size_t i = 0; i + 1 < lags.size(); ++i) {
      kappa->basis.values(lags[i], at);
      const Eigen::Map<const Vector> phi(at.data(), n);
      metric += (lags[i + 1] - lags[i]) * phi * phi.transpose();
    }
    const double ratio = mv.dot(metric * k) / mv.dot(metric * mv);
    // Spikes that do not follow the input leave b near 0; the gate will say so.
    b = std::isfinite(ratio) ? std::clamp(ratio, 0.02, 50.0) : 0.5;
  }
  theta[target.index("b")] = b;
  theta[target.index("theta_0/Delta")] = b * theta[0] - constant;
  if (const KernelPart* theta_1 = target.part("theta_1")) {
    Vector sum = Vector::Zero(static_cast<Eigen::Index>(theta_1->size()));
    if (const KernelPart* eta = target.part("eta")) {
      sum += b * project(eta->basis, coefficients_of(theta, *eta), theta_1->basis);
    }
    if (const KernelPart* history = pilot.part("eta_minus_theta_1")) {
      sum -= escape_map.slope *
             project(history->basis, coefficients_of(found, *history), theta_1->basis);
    }
    coefficients_of(theta, *theta_1) = sum;
  }
  return theta;
}

}  // namespace softsill

#include <cmath>

#include "estimator/fit/cell_fit.hpp"
#include "softsill/error.hpp"

namespace softsill {

Reading::Reading(const CellFit& fit) : fit_(fit) {
  const auto p = static_cast<Eigen::Index>(fit.coordinates().size());
  scale_.value = 1.0;
  scale_.gradient = Vector::Zero(p);
  mode_ = fit.joint() ? FitMode::spikes_and_voltage : FitMode::spikes_alone;
  if (fit.joint() || !fit.options->anchor) {
    return;
  }
  const Anchor& anchor = *fit.options->anchor;
  if (anchor.what == Anchor::What::noise_level) {
    scale_.value = anchor.value;
    scale_.anchor_derivative = 1.0;
  } else {
    const KernelPart* kappa = fit.coordinates().part("kappa");
    if (kappa == nullptr) {
      throw Error("", "anchor", "a resistance cannot anchor a variant without kappa",
                  "use noise_level=... instead");
    }
    // Delta = R / integral(kappa / Delta).
    const Derived area = integral(*kappa);
    scale_.value = anchor.value / area.value;
    scale_.gradient = -anchor.value / (area.value * area.value) * area.gradient;
    scale_.anchor_derivative = 1.0 / area.value;
  }
  anchor_error_ = anchor.standard_error;
  mode_ = FitMode::spikes_anchored;
}

std::string Reading::potential_unit() const {
  return mode_ == FitMode::spikes_alone ? "Delta" : "mV";
}

std::string Reading::kappa_unit() const {
  return potential_unit() + "/(" + fit_.recording->input_unit + " ms)";
}

std::string Reading::resistance_unit() const {
  const bool ohm = mode_ != FitMode::spikes_alone && fit_.recording->input_is_current &&
                   fit_.recording->input_unit == "nA";
  return ohm ? "MOhm" : potential_unit() + "/" + fit_.recording->input_unit;
}

Derived Reading::scaled(Derived in_delta) const {
  if (mode_ != FitMode::spikes_anchored) {
    return in_delta;
  }
  Derived out;
  out.value = in_delta.value * scale_.value;
  out.gradient = scale_.value * in_delta.gradient + in_delta.value * scale_.gradient;
  out.anchor_derivative = in_delta.value * scale_.anchor_derivative;
  return out;
}

Derived Reading::combine(const KernelPart& part, const std::vector<double>& weights,
                         const std::vector<double>& tau_derivatives) const {
  const Vector& theta = fit_.minimum.theta;
  Derived out;
  out.gradient = Vector::Zero(theta.size());
  for (std::size_t j = 0; j < part.size(); ++j) {
    const auto at = static_cast<Eigen::Index>(part.first + j);
    out.value += theta[at] * weights[j];
    out.gradient[at] += weights[j];
    if (!part.tau_index.empty() && part.tau_index[j] >= 0) {
      const std::ptrdiff_t tau = part.tau_index[j];
      out.gradient[tau] += theta[at] * tau_derivatives[j] *
                           fit_.coordinates().log_slope(static_cast<std::size_t>(tau), theta[tau]);
    }
  }
  if (part.scale == KernelPart::Scale::minus_one) {
    // theta_1 is carried in units of Delta = 1 / b.
    const std::ptrdiff_t b = fit_.coordinates().index("b");
    const double delta = 1.0 / theta[b];
    out.value *= delta;
    out.gradient *= delta;
    out.gradient[b] -= out.value * delta;
  }
  return scaled(std::move(out));
}

Derived Reading::curve(const KernelPart& part, double lag_ms) const {
  std::vector<double> at(part.size()), by_tau(part.size(), 0.0);
  part.basis.values(lag_ms, at);
  for (std::size_t j = 0; j < part.basis.time_constants_ms.size(); ++j) {
    by_tau[j] = lag_ms / part.basis.time_constants_ms[j] * at[j];
  }
  return combine(part, at, by_tau);
}

Derived Reading::integral(const KernelPart& part) const {
  // d tau / d log tau = tau: the integral of an exponential is its own derivative.
  const std::vector<double> area = part.basis.integrals();
  return combine(part, area, area);
}

Derived Reading::noise_level() const {
  if (!fit_.joint()) {
    return scale_;
  }
  const std::ptrdiff_t b = fit_.coordinates().index("b");
  Derived out;
  out.value = 1.0 / fit_.minimum.theta[b];
  out.gradient = Vector::Zero(fit_.minimum.theta.size());
  out.gradient[b] = -out.value * out.value;
  return out;
}

Derived Reading::threshold() const {
  const Vector& theta = fit_.minimum.theta;
  Derived out;
  out.gradient = Vector::Zero(theta.size());
  if (!fit_.joint()) {
    out.value = -theta[0];
    out.gradient[0] = -1.0;
    return scaled(std::move(out));
  }
  const std::ptrdiff_t b = fit_.coordinates().index("b");
  const std::ptrdiff_t at = fit_.coordinates().index("theta_0/Delta");
  const double delta = 1.0 / theta[b];
  out.value = theta[at] * delta + fit_.likelihood->voltage().reference_mV;
  out.gradient[at] = delta;
  out.gradient[b] = -theta[at] * delta * delta;
  return out;
}

Derived Reading::resting_potential() const {
  Derived out;
  out.value = fit_.minimum.theta[0] + fit_.likelihood->voltage().reference_mV;
  out.gradient = Vector::Zero(fit_.minimum.theta.size());
  out.gradient[0] = 1.0;
  return out;
}

double Reading::standard_error(const Derived& derived, const Matrix& covariance) const {
  const double own = delta_standard_error(derived.gradient, covariance);
  return std::hypot(own, derived.anchor_derivative * anchor_error_);
}

}  // namespace softsill

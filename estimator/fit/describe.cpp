#include <algorithm>
#include <cmath>

#include "estimator/fit/cell_fit.hpp"
#include "estimator/fit/plain_number.hpp"

namespace softsill {
namespace {

std::string sentence_for(const Estimate& estimate, const CellFit& fit) {
  const std::string gap = plain_number(estimate.newton_decrement, "%.1e") + " nats";
  switch (estimate.status) {
    case FitStatus::converged:
      return "Converged: the log-likelihood is within " + gap +
             " of its maximum, and curved downwards in every direction.";
    case FitStatus::at_boundary: {
      std::string held;
      for (std::size_t i = 0; i < fit.fixed.size(); ++i) {
        if (fit.fixed[i]) {
          held += (held.empty() ? "" : ", ") + fit.coordinates().names()[i];
        }
      }
      return "Converged with " + held +
             " held at the edge of the allowed range: widen the range or use fewer time constants.";
    }
    case FitStatus::converged_imprecise:
      return "Stopped " + gap +
             " short of the maximum, more than is allowed: no numbers are given. Try more "
             "iterations, another seed or fewer time constants.";
    case FitStatus::not_converged:
      if (fit.minimum.passed()) {
        return "Not converged: around the end the likelihood does not fall as its derivatives say, "
               "so some parameter runs away without bound; no numbers are given.";
      }
      return fit.minimum.positive_definite
                 ? "Not converged: still " + gap + " below the maximum; no numbers are given."
                 : "Not converged: the likelihood is flat or curved upwards in some direction, so "
                   "the data do not determine this variant; no numbers are given.";
    case FitStatus::interrupted:
    case FitStatus::failed:
      break;
  }
  return "Nothing is estimated.";
}

Quantity absent(const std::string& unit, const std::string& why) {
  Quantity quantity;
  quantity.unit = unit;
  quantity.why_absent = why;
  return quantity;
}

/// Symmetric interval, or on the log scale for what must stay positive.
Quantity with_interval(double value, double error, bool positive, double z, const std::string& unit,
                       const std::string& method) {
  Quantity quantity;
  quantity.value = value;
  quantity.unit = unit;
  quantity.method = method;
  if (!std::isfinite(error)) {
    return quantity;
  }
  if (positive && value > 0.0) {
    quantity.low = value * std::exp(-z * error / value);
    quantity.high = value * std::exp(z * error / value);
  } else {
    quantity.low = value - z * error;
    quantity.high = value + z * error;
  }
  return quantity;
}

/// Adds the row, and the same by the robust covariance.
void add_rows(const CellFit& fit, const Reading& reading, const std::string& name,
              const Derived& derived, bool positive, const std::string& unit, double z,
              Estimate& estimate) {
  estimate.parameters.push_back(
      {name, with_interval(derived.value, reading.standard_error(derived, fit.covariance), positive,
                           z, unit, "observed information")});
  estimate.parameters.push_back(
      {name, with_interval(derived.value, reading.standard_error(derived, fit.sandwich), positive,
                           z, unit, "robust sandwich")});
}

Derived coordinate(const CellFit& fit, std::ptrdiff_t at) {
  Derived out;
  out.value = fit.minimum.theta[at];
  out.gradient = Vector::Unit(fit.minimum.theta.size(), at);
  return out;
}

/// exp of a coordinate, times a factor.
Derived exponential_of(const CellFit& fit, std::ptrdiff_t at, double factor = 1.0) {
  Derived out = coordinate(fit, at);
  out.value = factor * std::exp(out.value);
  out.gradient *= out.value;
  return out;
}

void describe_noise_level(CellFit& fit, const Reading& reading, double z, Estimate& estimate) {
  if (reading.mode() == FitMode::spikes_alone) {
    estimate.noise_level = absent(
        "mV",
        "without the potential or an anchor, spikes fix every potential only in units of Delta");
    estimate.parameters.push_back({"noise_level", estimate.noise_level});
    return;
  }
  const Derived delta = reading.noise_level();
  if (reading.mode() == FitMode::spikes_anchored) {
    const bool given = fit.options->anchor->what == Anchor::What::noise_level;
    estimate.noise_level = with_interval(delta.value, reading.standard_error(delta, fit.covariance),
                                         true, z, "mV", given ? "given" : "anchored");
    estimate.parameters.push_back({"noise_level", estimate.noise_level});
    return;
  }
  const std::ptrdiff_t b = fit.coordinates().index("b");
  const ProfileInterval profile = profile_interval(*fit.penalised, fit.minimum, fit.covariance, b,
                                                   fit.options->level, fit.minimizer_options());
  Quantity quantity;
  quantity.value = delta.value;
  quantity.unit = "mV";
  quantity.method = "profile likelihood";
  // b = 1 / Delta: ends change places.
  if (profile.high) {
    quantity.low = 1.0 / *profile.high;
  }
  if (profile.low && *profile.low > 0.0) {
    quantity.high = 1.0 / *profile.low;  // otherwise the data allow any softness
  }
  estimate.noise_level = quantity;
  estimate.parameters.push_back({"noise_level", quantity});
  add_rows(fit, reading, "noise_level", delta, true, "mV", z, estimate);
}

void describe_potentials(const CellFit& fit, const Reading& reading, double z, Estimate& estimate) {
  const std::string unit = reading.potential_unit();
  const Derived threshold = reading.threshold();
  const std::string name = fit.joint() ? "threshold" : "threshold_above_rest";
  estimate.threshold =
      with_interval(threshold.value, reading.standard_error(threshold, fit.covariance), false, z,
                    unit, "observed information");
  if (!fit.joint()) {
    estimate.threshold.method += ", theta_0 - E_0";
  }
  add_rows(fit, reading, name, threshold, false, unit, z, estimate);
  if (fit.joint()) {
    const Derived rest = reading.resting_potential();
    estimate.resting_potential =
        with_interval(rest.value, reading.standard_error(rest, fit.covariance), false, z, unit,
                      "observed information");
    add_rows(fit, reading, "resting_potential", rest, false, unit, z, estimate);
  } else {
    estimate.resting_potential =
        absent(unit, "without the potential only the distance from rest to threshold is estimable");
    estimate.parameters.push_back({"resting_potential", estimate.resting_potential});
  }
  if (const KernelPart* kappa = fit.coordinates().part("kappa")) {
    const Derived area = reading.integral(*kappa);
    add_rows(fit, reading, fit.recording->input_is_current ? "input_resistance" : "input_gain",
             area, false, reading.resistance_unit(), z, estimate);
  }
}

void describe_time_constants(CellFit& fit, const Reading& reading, double z, Estimate& estimate) {
  for (const KernelPart& part : fit.coordinates().parts()) {
    if (part.basis.family != KernelFamily::exponentials) {
      continue;
    }
    for (std::size_t j = 0; j < part.size(); ++j) {
      const std::string index = "[" + std::to_string(j + 1) + "]";
      Derived amplitude = coordinate(fit, static_cast<std::ptrdiff_t>(part.first + j));
      double factor = reading.mode() == FitMode::spikes_anchored ? reading.scale() : 1.0;
      if (part.scale == KernelPart::Scale::minus_one) {
        factor = reading.noise_level().value;
      }
      amplitude.value *= factor;
      amplitude.gradient *= factor;
      add_rows(fit, reading, part.name + ".amplitude" + index, amplitude, false,
               part.name == "kappa" ? reading.kappa_unit() : reading.potential_unit(), z, estimate);
      const std::string name = part.name + ".time_constant" + index;
      const std::ptrdiff_t tau = part.tau_index.empty() ? -1 : part.tau_index[j];
      const double value = part.basis.time_constants_ms[j];
      if (tau < 0) {
        Quantity given;
        given.value = value;
        given.unit = "ms";
        given.method = "given";
        estimate.parameters.push_back({name, given});
        continue;
      }
      if (fit.fixed[static_cast<std::size_t>(tau)]) {
        Quantity held;
        held.value = value;
        held.unit = "ms";
        held.method = "held at the edge of its range";
        estimate.parameters.push_back({name, held});
        continue;
      }
      const auto coordinate_index = static_cast<std::size_t>(tau);
      const ProfileInterval profile =
          profile_interval(*fit.penalised, fit.minimum, fit.covariance, tau, fit.options->level,
                           fit.minimizer_options());
      Quantity quantity;
      quantity.value = value;
      quantity.unit = "ms";
      quantity.method = "profile likelihood";
      if (profile.low) {
        quantity.low = fit.coordinates().time_constant(coordinate_index, *profile.low);
      }
      if (profile.high) {
        quantity.high = fit.coordinates().time_constant(coordinate_index, *profile.high);
      }
      estimate.parameters.push_back({name, quantity});
    }
  }
}

void describe_rest(const CellFit& fit, const Reading& reading, double z, Estimate& estimate) {
  const Coordinates& coordinates = fit.coordinates();
  if (const std::ptrdiff_t at = coordinates.index("R_s"); at >= 0) {
    add_rows(fit, reading, "series_resistance", coordinate(fit, at), false,
             fit.recording->input_unit == "nA" ? "MOhm" : "mV/" + fit.recording->input_unit, z,
             estimate);
  }
  if (fit.joint()) {
    add_rows(fit, reading, "voltage_noise_sd", exponential_of(fit, coordinates.index("log_sigma")),
             true, "mV", z, estimate);
    // rho at the step read is exp(-step / tau) of an Ornstein-Uhlenbeck process.
    const std::ptrdiff_t at = coordinates.index("atanh_rho");
    const double rho = std::tanh(fit.minimum.theta[at]);
    if (rho > 0.0) {
      Derived tau = coordinate(fit, at);
      const double step = fit.likelihood->voltage().step_ms;
      tau.value = -step / std::log(rho);
      tau.gradient *= step / (std::log(rho) * std::log(rho)) * (1.0 - rho * rho) / rho;
      add_rows(fit, reading, "voltage_noise_time_constant", tau, true, "ms", z, estimate);
    }
  }
  if (const std::ptrdiff_t at = coordinates.index("log_lambda_0"); at >= 0) {
    add_rows(fit, reading, "lambda_0", exponential_of(fit, at, 1000.0), true, "Hz", z, estimate);
  }
  if (const std::ptrdiff_t at = coordinates.index("log_exponent"); at >= 0) {
    add_rows(fit, reading, "escape_exponent", exponential_of(fit, at), true, "1", z, estimate);
  }
  Quantity refractory;
  refractory.value = fit.exposure.refractory_ms;
  refractory.unit = "ms";
  refractory.method = fit.exposure.refractory_estimated
                          ? (fit.exposure.refractory_ms < 0.999 * fit.exposure.shortest_interval_ms
                                 ? "cap: no interval is that short"
                                 : "shortest interval")
                          : "given";
  estimate.parameters.push_back({"refractory_time", refractory});
}

Kernel kernel_of(const CellFit& fit, const char* name, double scale) {
  Kernel kernel;
  kernel.basis = Basis::absent();
  if (const KernelPart* part = fit.coordinates().part(name)) {
    kernel.basis = part->basis;
    for (std::size_t j = 0; j < part->size(); ++j) {
      kernel.coefficients.push_back(scale *
                                    fit.minimum.theta[static_cast<Eigen::Index>(part->first + j)]);
    }
  }
  return kernel;
}

Model model_of(const CellFit& fit, const Reading& reading, const Estimate& estimate) {
  Model model;
  model.name = estimate.cell;
  model.input_unit = fit.recording->input_unit;
  model.escape = fit.coordinates().map(fit.minimum.theta).escape;
  model.refractory_ms = fit.exposure.refractory_ms;
  if (fit.joint()) {
    model.noise_level = reading.noise_level().value;
    model.kappa = kernel_of(fit, "kappa", 1.0);
    model.eta = kernel_of(fit, "eta", 1.0);
    model.theta_1 = kernel_of(fit, "theta_1", model.noise_level);
    model.resting_potential = reading.resting_potential().value;
  } else {
    model.scale = reading.mode() == FitMode::spikes_alone ? PotentialScale::noise_level
                                                          : PotentialScale::millivolt;
    model.noise_level = reading.scale();
    model.kappa = kernel_of(fit, "kappa", reading.scale());
    model.eta = kernel_of(fit, "eta_minus_theta_1", reading.scale());
  }
  model.threshold = reading.threshold().value;
  return model;
}

void keep_coordinates(const CellFit& fit, Estimate& estimate) {
  const Eigen::Index p = fit.minimum.theta.size();
  estimate.coordinate_names = fit.coordinates().names();
  estimate.coordinates.assign(fit.minimum.theta.data(), fit.minimum.theta.data() + p);
  const RowMatrix bayes = fit.covariance, robust = fit.sandwich;
  estimate.covariance.assign(bayes.data(), bayes.data() + p * p);
  estimate.sandwich_covariance.assign(robust.data(), robust.data() + p * p);
}

}  // namespace

void describe(CellFit& fit, Estimate& estimate) {
  fit.likelihood->refresh(fit.minimum.theta);
  fit.covariance = inverse_information(fit.minimum.hessian, fit.fixed);
  const Matrix scores = fit.likelihood->scores(fit.minimum.theta);
  fit.time_blocks = static_cast<int>(scores.rows());
  fit.sandwich = sandwich_covariance(fit.covariance, scores);
  const Reading reading(fit);
  const double z = normal_quantile_for(fit.options->level);
  estimate.mode = reading.mode();
  estimate.status_sentence = sentence_for(estimate, fit);
  double penalty = 0.5 * fit.minimum.theta.dot(fit.penalised->penalty_matrix() * fit.minimum.theta);
  estimate.log_likelihood = -(fit.minimum.value - penalty);
  estimate.spike_log_likelihood = fit.likelihood->spike_log_likelihood(fit.minimum.theta);
  describe_curves(fit, reading, z, estimate);
  estimate.model = model_of(fit, reading, estimate);
  keep_coordinates(fit, estimate);
  if (!trustworthy(estimate.status)) {
    // The model stays for diagnosis; numbers with intervals would be believed.
    const std::string why = "the fit did not pass its gate";
    estimate.noise_level = absent("mV", why);
    estimate.threshold = absent("mV", why);
    estimate.resting_potential = absent("mV", why);
    for (KernelCurve& curve : estimate.kernels) {
      if (curve.why_absent.empty()) {
        curve = absent_curve(curve.kernel, why);
      }
    }
    return;
  }
  describe_noise_level(fit, reading, z, estimate);
  describe_potentials(fit, reading, z, estimate);
  describe_time_constants(fit, reading, z, estimate);
  describe_rest(fit, reading, z, estimate);
}

}  // namespace softsill

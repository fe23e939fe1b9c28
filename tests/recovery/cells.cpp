#include "tests/recovery/cells.hpp"

#include <cmath>
#include <limits>

#include "softsill/random.hpp"

namespace softsill::test {
namespace {

constexpr int pieces = 5;  // of a sample, for the hazard's integral
constexpr double normal_97_5 = 1.959963984540054;

// One random stream for each use, so that a change of one leaves the others alone.
enum Stream : std::uint64_t { current = 0, firing = 1, noise = 2, streams = 3 };

struct Terms {
  std::vector<double> value, factor, amplitude, rate;
  Terms(const std::vector<Decay>& decays, double step_ms) {
    for (const Decay& decay : decays) {
      value.push_back(0.0);
      factor.push_back(std::exp(-step_ms / decay.tau_ms));
      amplitude.push_back(decay.amplitude);
      rate.push_back(1.0 / decay.tau_ms);
    }
  }
  void advance() {
    for (std::size_t k = 0; k < value.size(); ++k) {
      value[k] *= factor[k];
    }
  }
  void add_spike(double since_ms) {
    for (std::size_t k = 0; k < value.size(); ++k) {
      value[k] += amplitude[k] * std::exp(-since_ms * rate[k]);
    }
  }
  /// Sum after another `lag` of decay, by the given half-step factors.
  double sum(const std::vector<double>& half) const {
    double total = 0.0;
    for (std::size_t k = 0; k < value.size(); ++k) {
      total += value[k] * half[k];
    }
    return total;
  }
  double sum() const {
    double total = 0.0;
    for (double each : value) {
      total += each;
    }
    return total;
  }
};

std::vector<double> half_factors(const std::vector<Decay>& decays, double step_ms) {
  std::vector<double> out;
  for (const Decay& decay : decays) {
    out.push_back(std::exp(-0.5 * step_ms / decay.tau_ms));
  }
  return out;
}

/// The spike itself, as the electrode would see it.
double spike_shape(double since_ms) {
  constexpr double rise = 0.4, fall = 1.5, peak = 90.0;
  if (since_ms < -rise || since_ms > fall) {
    return 0.0;
  }
  return since_ms < 0.0 ? peak * (1.0 + since_ms / rise) : peak * (1.0 - since_ms / fall);
}

}  // namespace

double value_at(const std::vector<Decay>& decays, double lag_ms) {
  double total = 0.0;
  for (const Decay& decay : decays) {
    total += decay.amplitude * std::exp(-lag_ms / decay.tau_ms);
  }
  return total;
}

double Cell::kappa(double lag_ms) const {
  return resistance_MOhm / tau_m_ms * std::exp(-lag_ms / tau_m_ms);
}

std::vector<double> ornstein_uhlenbeck(std::size_t samples, double step_ms, double mean, double sd,
                                       double correlation_ms, std::uint64_t seed,
                                       std::uint64_t stream) {
  RandomStream random(seed, stream);
  const double keep = std::exp(-step_ms / correlation_ms);
  const double kick = sd * std::sqrt(1.0 - keep * keep);
  std::vector<double> out(samples);
  double x = sd * random.normal();
  for (double& each : out) {
    each = mean + x;
    x = keep * x + kick * random.normal();
  }
  return out;
}

Sweep record(const Cell& cell, const Protocol& protocol, std::uint64_t seed,
             std::uint64_t replicate) {
  const auto samples =
      static_cast<std::size_t>(std::lround(1000.0 * protocol.seconds / protocol.step_ms));
  const std::uint64_t first_stream = replicate * streams;
  Sweep sweep;
  sweep.name = "simulated";
  sweep.step_ms = protocol.step_ms;
  sweep.input = ornstein_uhlenbeck(samples, protocol.step_ms, protocol.mean_nA, protocol.sd_nA,
                                   protocol.correlation_ms, seed, first_stream + current);
  std::vector<double> u(samples);
  const double h = protocol.step_ms / pieces;
  const double membrane = std::exp(-h / cell.tau_m_ms);
  const double membrane_half = std::exp(-0.5 * h / cell.tau_m_ms);
  Terms eta(cell.eta, h), theta_1(cell.theta_1, h);
  const std::vector<double> eta_half = half_factors(cell.eta, h);
  const std::vector<double> theta_half = half_factors(cell.theta_1, h);
  RandomStream random(seed, first_stream + firing);
  double left = random.exponential();  // of the hazard's integral to the next spike
  double safe_until = -1.0;            // end of the refractory time
  double v = 0.0;                      // (kappa * I)(t)
  for (std::size_t i = 0; i < samples; ++i) {
    const double drive = cell.resistance_MOhm * sweep.input[i];
    u[i] = cell.resting_potential_mV + v + eta.sum();
    for (int piece = 0; piece < pieces; ++piece) {
      const double begin = protocol.step_ms * static_cast<double>(i) + h * piece;
      const double end = begin + h;
      const double middle_u =
          cell.resting_potential_mV + drive + (v - drive) * membrane_half + eta.sum(eta_half);
      const double middle_theta = cell.threshold_mV + theta_1.sum(theta_half);
      const double x = (middle_u - middle_theta) / cell.noise_level_mV;
      const double hazard =
          cell.exponent > 0.0 ? std::pow(std::log1p(std::exp(x)), cell.exponent) : std::exp(x);
      const double from = std::max(begin, safe_until);
      v = drive + (v - drive) * membrane;
      eta.advance();
      theta_1.advance();
      if (from >= end) {
        continue;
      }
      const double here = hazard * (end - from);
      if (here < left) {
        left -= here;
        continue;
      }
      // At most one spike a piece: the refractory time is longer than a piece.
      const double at = from + left / hazard;
      sweep.spikes_ms.push_back(at);
      safe_until = at + std::max(cell.refractory_ms, h);
      eta.add_spike(end - at);
      theta_1.add_spike(end - at);
      left = random.exponential();
    }
  }
  sweep.analysed = {{0.0, sweep.end_ms()}};
  if (protocol.with_voltage) {
    const std::vector<double> error =
        ornstein_uhlenbeck(samples, protocol.step_ms, 0.0, protocol.voltage_noise_mV,
                           protocol.voltage_noise_ms, seed, first_stream + noise);
    sweep.voltage_mV = u;
    for (std::size_t i = 0; i < samples; ++i) {
      sweep.voltage_mV[i] += error[i] + protocol.series_resistance_MOhm * sweep.input[i];
    }
    for (double spike : sweep.spikes_ms) {
      const double reach = 2.0;
      const auto low = static_cast<std::size_t>(std::max(0.0, (spike - reach) / sweep.step_ms));
      for (std::size_t i = low;
           i < samples && sweep.step_ms * static_cast<double>(i) < spike + reach; ++i) {
        sweep.voltage_mV[i] += spike_shape(sweep.step_ms * static_cast<double>(i) - spike);
      }
    }
  }
  return sweep;
}

Recording recording_of(const Cell& cell, const Protocol& protocol, std::uint64_t seed,
                       std::uint64_t replicate) {
  Recording recording;
  recording.cell = "simulated";
  recording.sweeps.push_back(record(cell, protocol, seed, replicate));
  return recording;
}

void set_rate(Cell& cell, const Protocol& protocol, double rate_Hz) {
  Protocol trial = protocol;
  trial.seconds = 20.0;
  trial.with_voltage = false;
  double low = cell.resting_potential_mV, high = cell.resting_potential_mV + 60.0;
  for (int i = 0; i < 10; ++i) {
    cell.threshold_mV = 0.5 * (low + high);
    const double rate = static_cast<double>(record(cell, trial, 7).spikes_ms.size()) / 20.0;
    (rate > rate_Hz ? low : high) = cell.threshold_mV;
  }
  // Two digits: a number a person could have chosen.
  cell.threshold_mV = std::round(100.0 * cell.threshold_mV) / 100.0;
}

double Truth::kernel(const Cell& cell, const std::string& name, double lag_ms) const {
  if (name == "kappa") {
    return cell.kappa(lag_ms) / unit;
  }
  const double eta = value_at(cell.eta, lag_ms), theta_1 = value_at(cell.theta_1, lag_ms);
  return (name == "eta" ? eta : name == "theta_1" ? theta_1 : eta - theta_1) / unit;
}

Truth truth_of(const Cell& cell, FitMode mode) {
  Truth truth;
  const bool alone = mode == FitMode::spikes_alone;
  truth.unit = alone ? cell.noise_level_mV : 1.0;
  truth.noise_level = alone ? 0.0 : cell.noise_level_mV;
  const bool joint = mode == FitMode::spikes_and_voltage;
  truth.threshold =
      joint ? cell.threshold_mV : (cell.threshold_mV - cell.resting_potential_mV) / truth.unit;
  truth.resting_potential = cell.resting_potential_mV;
  truth.resistance = cell.resistance_MOhm / truth.unit;
  return truth;
}

Variant spline_variant() {
  Variant variant;
  variant.eta.support_ms = 500.0;
  variant.theta_1.support_ms = 800.0;
  variant.theta_1.count = 16;
  return variant;
}

Variant exponential_variant(const Cell& cell) {
  Variant variant;
  variant.kappa.family = KernelFamily::exponentials;
  variant.kappa.count = 1;
  auto given = [](KernelPlan& plan, const std::vector<Decay>& decays) {
    if (decays.empty()) {
      plan.family = KernelFamily::absent;
      return;
    }
    plan.family = KernelFamily::exponentials;
    plan.count = static_cast<int>(decays.size());
    plan.fit_time_constants = false;
    plan.time_constants_ms.clear();
    for (const Decay& decay : decays) {
      plan.time_constants_ms.push_back(decay.tau_ms);
    }
  };
  given(variant.eta, cell.eta);
  given(variant.theta_1, cell.theta_1);
  return variant;
}

const Quantity* find_row(const Estimate& estimate, const std::string& name,
                         const std::string& method) {
  for (const NamedQuantity& row : estimate.parameters) {
    if (row.name == name && (method.empty() || row.quantity.method == method)) {
      return &row.quantity;
    }
  }
  return nullptr;
}

const KernelCurve* find_curve(const Estimate& estimate, const std::string& name) {
  for (const KernelCurve& curve : estimate.kernels) {
    if (curve.kernel == name) {
      return &curve;
    }
  }
  return nullptr;
}

double z_score(const Quantity& quantity, double truth, bool log_scale) {
  if (!quantity.value || !quantity.low || !quantity.high) {
    return std::numeric_limits<double>::quiet_NaN();
  }
  if (log_scale) {
    return (std::log(*quantity.value) - std::log(truth)) * 2.0 * normal_97_5 /
           std::log(*quantity.high / *quantity.low);
  }
  return (*quantity.value - truth) * 2.0 * normal_97_5 / (*quantity.high - *quantity.low);
}

double share_inside(const Cell& cell, const Estimate& estimate, const KernelCurve& curve) {
  const Truth truth = truth_of(cell, estimate.mode);
  std::size_t inside = 0, counted = 0;
  for (std::size_t i = 0; curve.lag_ms[i] < curve.lag_ms.back() * 2.0 / 3.0; ++i) {
    const double value = truth.kernel(cell, curve.kernel, curve.lag_ms[i]);
    inside += curve.low[i] <= value && value <= curve.high[i] ? 1 : 0;
    ++counted;
  }
  return static_cast<double>(inside) / static_cast<double>(counted);
}

}  // namespace softsill::test

#include "estimator/fit/coordinates.hpp"

#include <algorithm>
#include <cmath>

#include "softsill/error.hpp"

namespace softsill {
namespace {

/// |logit| beyond which a time constant counts as lying on its bound (within 0.03 % of the range).
constexpr double edge_logit = 8.0;

double sigmoid(double z) { return 1.0 / (1.0 + std::exp(-z)); }

bool same_columns(const KernelPlan& a, const KernelPlan& b) {
  if (a.family != b.family) {
    return false;
  }
  if (a.family == KernelFamily::spline) {
    return a.support_ms == b.support_ms && a.first_ms == b.first_ms && a.count == b.count;
  }
  return a.family == KernelFamily::steps && a.edges_ms == b.edges_ms;
}

std::vector<double> starting_time_constants(const KernelPlan& plan) {
  std::vector<double> taus = plan.time_constants_ms;
  if (taus.empty()) {
    // Spread evenly on the log scale, away from the bounds.
    const double span = std::log(plan.longest_ms / plan.shortest_ms);
    for (int i = 0; i < plan.count; ++i) {
      taus.push_back(plan.shortest_ms * std::exp(span * (i + 1.0) / (plan.count + 1.0)));
    }
  }
  return taus;
}

}  // namespace

Basis basis_of(const KernelPlan& plan) {
  switch (plan.family) {
    case KernelFamily::absent:
      return Basis::absent();
    case KernelFamily::spline:
      return Basis::spline(plan.support_ms, plan.first_ms, plan.count);
    case KernelFamily::steps:
      return Basis::steps(plan.edges_ms);
    case KernelFamily::exponentials:
      return Basis::exponentials(starting_time_constants(plan));
  }
  throw InternalError("unknown kernel family");
}

KernelPlan merged_history_plan(const Variant& variant) {
  const KernelPlan &eta = variant.eta, &theta_1 = variant.theta_1;
  if (eta.family == KernelFamily::absent) {
    return theta_1;
  }
  if (theta_1.family == KernelFamily::absent) {
    return eta;
  }
  if (eta.family == KernelFamily::exponentials && theta_1.family == KernelFamily::exponentials) {
    KernelPlan both = eta;
    both.count = std::min(5, eta.count + theta_1.count);
    both.time_constants_ms.clear();
    if (!eta.time_constants_ms.empty() && !theta_1.time_constants_ms.empty()) {
      both.time_constants_ms = eta.time_constants_ms;
      both.time_constants_ms.insert(both.time_constants_ms.end(), theta_1.time_constants_ms.begin(),
                                    theta_1.time_constants_ms.end());
      std::sort(both.time_constants_ms.begin(), both.time_constants_ms.end());
      both.time_constants_ms.erase(
          std::unique(both.time_constants_ms.begin(), both.time_constants_ms.end()),
          both.time_constants_ms.end());
      both.count = static_cast<int>(both.time_constants_ms.size());
    }
    both.shortest_ms = std::min(eta.shortest_ms, theta_1.shortest_ms);
    both.longest_ms = std::max(eta.longest_ms, theta_1.longest_ms);
    both.fit_time_constants = eta.fit_time_constants || theta_1.fit_time_constants;
    return both;
  }
  return basis_of(theta_1).support_ms > basis_of(eta).support_ms ? theta_1 : eta;
}

std::size_t Coordinates::add_name(const std::string& name) {
  names_.push_back(name);
  return names_.size() - 1;
}

void Coordinates::add_part(const std::string& name, const KernelPlan& plan, KernelPart::Scale scale,
                           bool in_voltage, bool share_history) {
  if (plan.family == KernelFamily::absent) {
    return;
  }
  KernelPart part;
  part.name = name;
  part.plan = plan;
  part.scale = scale;
  std::vector<double> taus;
  const bool exponentials = plan.family == KernelFamily::exponentials;
  const KernelPart* kappa = this->part("kappa");
  const bool membrane = exponentials && plan.with_membrane && name != "kappa" && kappa != nullptr &&
                        kappa->plan.family == KernelFamily::exponentials;
  if (exponentials) {
    taus = starting_time_constants(plan);
    if (membrane) {
      taus.push_back(kappa->basis.time_constants_ms.front());
    }
    part.basis = Basis::exponentials(taus);
  } else {
    part.basis = basis_of(plan);
  }
  part.first = names_.size();
  for (std::size_t j = 0; j < part.basis.size(); ++j) {
    add_name(name + "[" + std::to_string(j + 1) + "]");
  }
  bool derivatives = exponentials && plan.fit_time_constants;
  if (exponentials) {
    const std::size_t own = taus.size() - (membrane ? 1 : 0);
    for (std::size_t j = 0; j < own; ++j) {
      if (!plan.fit_time_constants) {
        part.tau_index.push_back(-1);
        continue;
      }
      const std::size_t at = add_name(name + ".tau[" + std::to_string(j + 1) + "]");
      tau_ranges_.push_back({at, plan.shortest_ms, plan.longest_ms, taus[j]});
      part.tau_index.push_back(static_cast<std::ptrdiff_t>(at));
    }
    if (membrane) {
      part.tau_index.push_back(kappa->tau_index.front());
      derivatives = derivatives || kappa->tau_index.front() >= 0;
    }
  }
  const bool input = name == "kappa";
  ColumnBlock block;
  block.kind = input ? ColumnBlock::Kind::input : ColumnBlock::Kind::history;
  block.basis = part.basis;
  block.derivatives = derivatives;
  if (share_history) {
    part.spike_block = parts_.back().spike_block;
  } else {
    part.spike_block = static_cast<int>(spike_columns_.blocks.size());
    spike_columns_.add(block);
  }
  if (in_voltage) {
    part.voltage_block = static_cast<int>(voltage_columns_.blocks.size());
    voltage_columns_.add(block);
  }
  parts_.push_back(std::move(part));
}

Coordinates::Coordinates(const Variant& variant, bool joint, bool fit_series_resistance)
    : variant_(variant), joint_(joint) {
  using Scale = KernelPart::Scale;
  ColumnBlock one;
  one.kind = ColumnBlock::Kind::one;
  spike_columns_.add(one);
  if (joint) {
    voltage_columns_.add(one);
    add_name("E_0");
    add_part("kappa", variant.kappa, Scale::times_b, true, false);
    add_part("eta", variant.eta, Scale::times_b, true, false);
    add_name("b");
    add_name("theta_0/Delta");
    const bool share =
        variant.eta.family != KernelFamily::absent && same_columns(variant.eta, variant.theta_1);
    add_part("theta_1", variant.theta_1, Scale::minus_one, false, share);
    if (fit_series_resistance) {
      ColumnBlock current;
      current.kind = ColumnBlock::Kind::current;
      voltage_columns_.add(current);
      add_name("R_s");
    }
    add_name("log_sigma");
    add_name("atanh_rho");
  } else {
    add_name("(E_0-theta_0)/Delta");
    add_part("kappa", variant.kappa, Scale::one, false, false);
    add_part("eta_minus_theta_1", merged_history_plan(variant), Scale::one, false, false);
  }
  if (variant.fit_lambda_0 && variant.escape.kind != EscapeKind::exponential) {
    add_name("log_lambda_0");
  }
  if (variant.fit_exponent && variant.escape.kind == EscapeKind::rectified_power) {
    add_name("log_exponent");
  }
}

const KernelPart* Coordinates::part(const std::string& name) const {
  for (const KernelPart& part : parts_) {
    if (part.name == name) {
      return &part;
    }
  }
  return nullptr;
}

Eigen::Index Coordinates::spike_column(const KernelPart& part) const {
  return static_cast<Eigen::Index>(
      spike_columns_.blocks[static_cast<std::size_t>(part.spike_block)].first);
}

Eigen::Index Coordinates::voltage_column(const KernelPart& part) const {
  return static_cast<Eigen::Index>(
      voltage_columns_.blocks[static_cast<std::size_t>(part.voltage_block)].first);
}

std::ptrdiff_t Coordinates::index(const std::string& name) const {
  const auto found = std::find(names_.begin(), names_.end(), name);
  return found == names_.end() ? -1 : found - names_.begin();
}

double Coordinates::support_ms() const {
  double longest = 0.0;
  for (const KernelPart& part : parts_) {
    longest = std::max(longest, part.basis.support_ms);
  }
  return longest;
}

const Coordinates::TauRange& Coordinates::range_of(std::size_t coordinate) const {
  for (const TauRange& range : tau_ranges_) {
    if (range.coordinate == coordinate) {
      return range;
    }
  }
  throw InternalError("coordinate is no time constant");
}

double Coordinates::time_constant(std::size_t coordinate, double value) const {
  const TauRange& range = range_of(coordinate);
  return range.shortest * std::pow(range.longest / range.shortest, sigmoid(value));
}

double Coordinates::coordinate_of(std::size_t coordinate, double time_constant_ms) const {
  const TauRange& range = range_of(coordinate);
  const double share = std::clamp(
      std::log(time_constant_ms / range.shortest) / std::log(range.longest / range.shortest), 1e-3,
      1.0 - 1e-3);
  return std::log(share / (1.0 - share));
}

double Coordinates::log_slope(std::size_t coordinate, double value) const {
  const TauRange& range = range_of(coordinate);
  const double s = sigmoid(value);
  return std::log(range.longest / range.shortest) * s * (1.0 - s);
}

bool Coordinates::at_edge(std::size_t coordinate, double value) const {
  return is_time_constant(coordinate) && std::abs(value) > edge_logit;
}

bool Coordinates::is_time_constant(std::size_t coordinate) const {
  return std::any_of(tau_ranges_.begin(), tau_ranges_.end(),
                     [&](const TauRange& range) { return range.coordinate == coordinate; });
}

Vector Coordinates::neutral_start() const {
  Vector theta = Vector::Zero(static_cast<Eigen::Index>(size()));
  for (const TauRange& range : tau_ranges_) {
    theta[static_cast<Eigen::Index>(range.coordinate)] =
        coordinate_of(range.coordinate, range.start);
  }
  if (const std::ptrdiff_t at = index("log_lambda_0"); at >= 0) {
    theta[at] = std::log(variant_.escape.lambda_0_per_ms);
  }
  if (const std::ptrdiff_t at = index("log_exponent"); at >= 0) {
    theta[at] = std::log(variant_.escape.exponent);
  }
  return theta;
}

bool Coordinates::take_time_constants(const Vector& theta) {
  bool changed = false;
  for (KernelPart& part : parts_) {
    for (std::size_t j = 0; j < part.tau_index.size(); ++j) {
      if (part.tau_index[j] < 0) {
        continue;
      }
      const auto at = static_cast<std::size_t>(part.tau_index[j]);
      const double tau = time_constant(at, theta[part.tau_index[j]]);
      if (tau != part.basis.time_constants_ms[j]) {
        part.basis.time_constants_ms[j] = tau;
        changed = true;
      }
    }
    if (changed && !part.tau_index.empty()) {
      part.basis = Basis::exponentials(part.basis.time_constants_ms);
      spike_columns_.blocks[static_cast<std::size_t>(part.spike_block)].basis = part.basis;
      if (part.voltage_block >= 0) {
        voltage_columns_.blocks[static_cast<std::size_t>(part.voltage_block)].basis = part.basis;
      }
    }
  }
  return changed;
}

Mapped Coordinates::map(const Vector& theta) const {
  const auto p = static_cast<Eigen::Index>(size());
  const auto q = static_cast<Eigen::Index>(spike_columns_.width);
  const auto r = static_cast<Eigen::Index>(voltage_columns_.width);
  Mapped m;
  m.beta = Vector::Zero(q);
  m.beta_jacobian = Matrix::Zero(q + 2, p);
  m.v = Vector::Zero(r);
  m.v_jacobian = Matrix::Zero(r + 2, p);
  m.escape = variant_.escape;
  if (const std::ptrdiff_t at = index("log_lambda_0"); at >= 0) {
    m.escape.lambda_0_per_ms = std::exp(theta[at]);
    m.beta_jacobian(q, at) = 1.0;
  }
  if (const std::ptrdiff_t at = index("log_exponent"); at >= 0) {
    m.escape.exponent = std::exp(theta[at]);
    m.beta_jacobian(q + 1, at) = 1.0;
  }
  const std::ptrdiff_t b_index = index("b");
  const double b = joint_ ? theta[b_index] : 1.0;
  if (joint_) {
    const std::ptrdiff_t threshold = index("theta_0/Delta");
    m.beta[0] = b * theta[0] - theta[threshold];
    m.beta_jacobian(0, 0) = b;
    m.beta_jacobian(0, b_index) = theta[0];
    m.beta_jacobian(0, threshold) = -1.0;
    m.v[0] = theta[0];
    m.v_jacobian(0, 0) = 1.0;
    if (const std::ptrdiff_t at = index("R_s"); at >= 0) {
      m.v[r - 1] = theta[at];
      m.v_jacobian(r - 1, at) = 1.0;
    }
    const std::ptrdiff_t sigma = index("log_sigma"), rho = index("atanh_rho");
    m.log_sigma = theta[sigma];
    m.atanh_rho = theta[rho];
    m.v_jacobian(r, sigma) = 1.0;
    m.v_jacobian(r + 1, rho) = 1.0;
  } else {
    m.beta[0] = theta[0];
    m.beta_jacobian(0, 0) = 1.0;
  }
  for (const KernelPart& part : parts_) {
    const auto n = static_cast<Eigen::Index>(part.size());
    const bool scaled = part.scale == KernelPart::Scale::times_b;
    const double factor = scaled ? b : part.scale == KernelPart::Scale::minus_one ? -1.0 : 1.0;
    const Eigen::Index spike_first = spike_column(part);
    for (Eigen::Index j = 0; j < n; ++j) {
      const auto at = static_cast<Eigen::Index>(part.first) + j;
      const double amplitude = theta[at];
      const std::ptrdiff_t tau =
          part.tau_index.empty() ? -1 : part.tau_index[static_cast<std::size_t>(j)];
      double slope = 0.0;  // d log tau / d coordinate
      if (tau >= 0) {
        slope = log_slope(static_cast<std::size_t>(tau), theta[tau]);
      }
      m.beta[spike_first + j] += factor * amplitude;
      m.beta_jacobian(spike_first + j, at) += factor;
      if (scaled) {
        m.beta_jacobian(spike_first + j, b_index) += amplitude;
      }
      if (tau >= 0) {
        m.beta_jacobian(spike_first + n + j, tau) += factor * amplitude * slope;
      }
      if (part.voltage_block >= 0) {
        const Eigen::Index first = voltage_column(part);
        m.v[first + j] += amplitude;
        m.v_jacobian(first + j, at) += 1.0;
        if (tau >= 0) {
          m.v_jacobian(first + n + j, tau) += amplitude * slope;
        }
      }
    }
  }
  return m;
}

void Coordinates::add_curvature(const Vector& theta, const Vector& beta_weight,
                                const Vector& v_weight, Matrix& hessian) const {
  auto add = [&](std::ptrdiff_t i, std::ptrdiff_t j, double value) {
    hessian(i, j) += value;
    if (i != j) {
      hessian(j, i) += value;
    }
  };
  const std::ptrdiff_t b_index = index("b");
  const double b = joint_ ? theta[b_index] : 1.0;
  if (joint_) {
    add(0, b_index, beta_weight[0]);
  }
  for (const KernelPart& part : parts_) {
    const auto n = static_cast<Eigen::Index>(part.size());
    const bool scaled = part.scale == KernelPart::Scale::times_b;
    const double factor = scaled ? b : part.scale == KernelPart::Scale::minus_one ? -1.0 : 1.0;
    const Eigen::Index spike_first = spike_column(part);
    const Eigen::Index voltage_first =
        part.voltage_block < 0 ? Eigen::Index{0} : voltage_column(part);
    for (Eigen::Index j = 0; j < n; ++j) {
      const auto at = static_cast<Eigen::Index>(part.first) + j;
      const double amplitude = theta[at];
      if (scaled) {
        add(b_index, at, beta_weight[spike_first + j]);
      }
      const std::ptrdiff_t tau =
          part.tau_index.empty() ? -1 : part.tau_index[static_cast<std::size_t>(j)];
      if (tau < 0) {
        continue;
      }
      const double slope = log_slope(static_cast<std::size_t>(tau), theta[tau]);
      const double bend = slope * (1.0 - 2.0 * sigmoid(theta[tau]));
      // Columns of first and second derivatives by log tau carry the expansion
      // a (phi + phi' d + phi'' d^2 / 2), d = slope dz + bend dz^2 / 2.
      const double first = beta_weight[spike_first + n + j];
      const double second = beta_weight[spike_first + 2 * n + j];
      add(at, tau, first * factor * slope);
      if (scaled) {
        add(b_index, tau, first * amplitude * slope);
      }
      add(tau, tau, factor * amplitude * (first * bend + second * slope * slope));
      if (part.voltage_block >= 0) {
        const double v_first = v_weight[voltage_first + n + j];
        const double v_second = v_weight[voltage_first + 2 * n + j];
        add(at, tau, v_first * slope);
        add(tau, tau, amplitude * (v_first * bend + v_second * slope * slope));
      }
    }
  }
}

}  // namespace softsill

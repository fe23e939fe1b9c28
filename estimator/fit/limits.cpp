#include <Eigen/Eigenvalues>
#include <algorithm>
#include <cmath>

#include "estimator/fit/cell_fit.hpp"
#include "estimator/fit/plain_number.hpp"

namespace softsill {
namespace {

constexpr std::size_t few_spikes = 500;
constexpr double tied_correlation = 0.95;
constexpr double robust_ratio = 1.5;
constexpr double late_share = 0.7;  // of the support
constexpr double late_size = 0.01;  // of the kernel's largest value

/// What a coordinate is called in a sentence.
std::string plain_name(const std::string& coordinate) {
  if (coordinate == "b") {
    return "Delta";
  }
  if (coordinate == "theta_0/Delta") {
    return "theta_0";
  }
  if (coordinate == "log_lambda_0") {
    return "lambda_0";
  }
  if (coordinate == "log_sigma") {
    return "the voltage noise's sd";
  }
  if (coordinate == "atanh_rho") {
    return "its time constant";
  }
  if (coordinate == "log_exponent") {
    return "the escape exponent";
  }
  return coordinate;
}

void say_spikes(const CellFit& fit, Estimate& estimate) {
  if (fit.exposure.spikes < few_spikes) {
    estimate.limits.push_back(
        "only " + std::to_string(fit.exposure.spikes) +
        " spikes enter the likelihood; below about 500, intervals are wide and estimates of Delta "
        "may be biased by several per cent");
  }
}

void say_undetermined_lags(Estimate& estimate) {
  for (const KernelCurve& curve : estimate.kernels) {
    for (const Interval& stretch : curve.undetermined) {
      estimate.limits.push_back(curve.kernel + " between " + plain_number(stretch.begin_ms) +
                                " and " + plain_number(stretch.end_ms) +
                                " ms is set by the smoothing, not by the data");
    }
  }
}

/// Profile intervals that never close.
void say_unbounded(Estimate& estimate) {
  for (const NamedQuantity& row : estimate.parameters) {
    const Quantity& quantity = row.quantity;
    if (quantity.value && quantity.method == "profile likelihood" &&
        !(quantity.low && quantity.high)) {
      const char* side = quantity.low ? "upper" : quantity.high ? "lower" : "lower or upper";
      estimate.limits.push_back(row.name + " has no " + side +
                                " bound: the likelihood does not fall "
                                "far enough on that side");
    }
  }
}

/// Splines are forced to 0 at the end of their support; a kernel that is clearly not 0 shortly
/// before was cut off, and what is missing went into the constants.
void say_unfinished(const CellFit& fit, Estimate& estimate) {
  for (const KernelCurve& curve : estimate.kernels) {
    const KernelPart* part = fit.coordinates().part(curve.kernel);
    if (part == nullptr || part->basis.family != KernelFamily::spline) {
      continue;
    }
    double largest = 0.0;
    for (double value : curve.value) {
      largest = std::max(largest, std::abs(value));
    }
    for (std::size_t i = 0; i < curve.lag_ms.size(); ++i) {
      const bool clear = curve.low[i] > 0.0 || curve.high[i] < 0.0;
      if (curve.lag_ms[i] > late_share * part->basis.support_ms && clear &&
          std::abs(curve.value[i]) > late_size * largest) {
        estimate.limits.push_back(
            curve.kernel + " has not reached 0 at " + plain_number(curve.lag_ms[i]) +
            " ms, shortly before its support of " + plain_number(part->basis.support_ms, "%.4g") +
            " ms ends: a longer support_ms may change it and the constants");
        break;
      }
    }
  }
}

/// Time constants that the data cannot keep apart.
void say_twins(const CellFit& fit, Estimate& estimate) {
  for (const KernelPart& part : fit.coordinates().parts()) {
    const std::vector<double>& tau = part.basis.time_constants_ms;
    for (std::size_t i = 0; i < tau.size(); ++i) {
      for (std::size_t j = i + 1; j < tau.size(); ++j) {
        if (std::abs(std::log(tau[i] / tau[j])) < 0.1) {
          estimate.limits.push_back("two time constants of " + part.name + " coincide (" +
                                    plain_number(tau[i]) + " and " + plain_number(tau[j]) +
                                    " ms): use one exponential less");
        }
      }
    }
  }
}

void say_mode(const CellFit& fit, Estimate& estimate) {
  if (fit.joint()) {
    if (fit.coordinates().part("eta") != nullptr && fit.coordinates().part("theta_1") != nullptr) {
      estimate.limits.push_back(
          "within " + plain_number(fit.variant->mask_after_ms) +
          " ms after a spike the potential is not used: there only eta - theta_1 is seen, and its "
          "split into eta and theta_1 is an extrapolation by smoothness");
    }
    return;
  }
  if (estimate.mode == FitMode::spikes_alone) {
    estimate.limits.push_back(
        "no potential was used and no anchor given: kernels are in units of Delta, and Delta in mV "
        "cannot be estimated from spikes alone");
  } else {
    estimate.limits.push_back(
        "the mV scale comes from the anchor alone; its uncertainty is in "
        "every interval, its bias would be in every number");
  }
  if (fit.coordinates().part("eta_minus_theta_1") != nullptr) {
    estimate.limits.push_back(
        "spikes alone see only eta - theta_1: afterpotential and moving threshold are not told "
        "apart");
  }
}

void say_refractory(const CellFit& fit, Estimate& estimate) {
  const Exposure& exposure = fit.exposure;
  if (!std::isfinite(exposure.shortest_interval_ms)) {
    return;
  }
  if (exposure.shortest_interval_ms > 1.01 * exposure.refractory_ms) {
    estimate.limits.push_back(
        "no spike follows another within " + plain_number(exposure.shortest_interval_ms) +
        " ms: between " + plain_number(exposure.refractory_ms) +
        " ms and there the after-spike kernels are bounded by the smoothing only");
  }
  for (const Penalty& penalty : fit.penalised->penalties()) {
    if (!penalty.chosen && penalty.rank == 1 && penalty.matrix.rows() == 1) {
      estimate.limits.push_back(penalty.name +
                                ": the likelihood alone would send this coefficient to minus "
                                "infinity; a prior of 5 units of Delta holds it");
    }
  }
}

/// Pairs of headline coordinates that the data cannot move apart.
void say_ties(const CellFit& fit, Estimate& estimate) {
  const Coordinates& coordinates = fit.coordinates();
  std::vector<Eigen::Index> headline;
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    const std::string& name = coordinates.names()[i];
    const bool kernel_coefficient =
        name.find('[') != std::string::npos && !coordinates.is_time_constant(i);
    if (!kernel_coefficient && !fit.fixed[i]) {
      headline.push_back(static_cast<Eigen::Index>(i));
    }
  }
  for (std::size_t a = 0; a < headline.size(); ++a) {
    for (std::size_t b = a + 1; b < headline.size(); ++b) {
      const Eigen::Index i = headline[a], j = headline[b];
      const double r =
          fit.covariance(i, j) / std::sqrt(fit.covariance(i, i) * fit.covariance(j, j));
      // theta_0 / Delta moves with 1 / Delta by construction; that is no limit of the data.
      const std::string& first = coordinates.names()[static_cast<std::size_t>(i)];
      const std::string& second = coordinates.names()[static_cast<std::size_t>(j)];
      const bool by_construction = first == "b" && second == "theta_0/Delta";
      if (std::abs(r) > tied_correlation && !by_construction) {
        estimate.limits.push_back(plain_name(first) + " and " + plain_name(second) +
                                  " can hardly be told apart (correlation " +
                                  plain_number(r, "%.3f") + "): quote them together");
      }
    }
  }
}

/// The direction that the likelihood itself, without smoothing, leaves most open.
void say_flat_direction(const CellFit& fit, Estimate& estimate) {
  std::vector<Eigen::Index> free;
  for (std::size_t i = 0; i < fit.fixed.size(); ++i) {
    if (!fit.fixed[i]) {
      free.push_back(static_cast<Eigen::Index>(i));
    }
  }
  const Matrix whole = fit.minimum.hessian;
  const Matrix data = whole - fit.penalised->penalty_matrix();
  const Vector scale = whole.diagonal().cwiseMax(1e-300).cwiseSqrt().cwiseInverse();
  const Matrix scaled = Matrix(scale.asDiagonal() * data * scale.asDiagonal())(free, free);
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(scaled);
  const double largest = eigen.eigenvalues().maxCoeff();
  int flat = 0;
  for (Eigen::Index i = 0; i < eigen.eigenvalues().size(); ++i) {
    flat += eigen.eigenvalues()[i] < 1e-6 * largest ? 1 : 0;
  }
  if (flat == 0) {
    return;
  }
  const Vector direction = eigen.eigenvectors().col(0).cwiseAbs();
  Eigen::Index strongest = 0;
  direction.maxCoeff(&strongest);
  const std::string& name =
      fit.coordinates()
          .names()[static_cast<std::size_t>(free[static_cast<std::size_t>(strongest)])];
  estimate.limits.push_back(
      std::to_string(flat) + " of " + std::to_string(free.size()) +
      " directions are (almost) undetermined by the data and held by the smoothing; the flattest "
      "is mostly " +
      plain_name(name.substr(0, name.find('['))));
}

void say_misspecification(const CellFit& fit, Estimate& estimate) {
  if (fit.time_blocks < 20) {
    estimate.notes.push_back("the recording has only " + std::to_string(fit.time_blocks) +
                             " time blocks: robust (sandwich) intervals are rough");
    return;
  }
  const std::ptrdiff_t b_index = fit.coordinates().index("b");
  const std::ptrdiff_t at = b_index >= 0 ? b_index : 0;
  const double ratio = std::sqrt(fit.sandwich(at, at) / fit.covariance(at, at));
  if (ratio > robust_ratio) {
    estimate.limits.push_back(
        "the robust standard error of " + std::string(b_index >= 0 ? "Delta" : "the threshold") +
        " is " + plain_number(ratio, "%.1f") +
        " times the model's own: the model class or stationarity is doubtful, prefer the robust "
        "interval");
  }
}

/// Hazard saturation: where spikes are certain, their timing says nothing about f.
void say_saturation(const CellFit& fit, Estimate& estimate) {
  const Mapped m = fit.coordinates().map(fit.minimum.theta);
  const SpikeDesign& design = fit.likelihood->design();
  const Vector x = predictor(design.nodes, m.beta);
  double total = 0.0, saturated = 0.0;
  for (Eigen::Index i = 0; i < x.size(); ++i) {
    const double rate = escape_rate(m.escape, x[i]);
    total += design.weights_ms[i] * rate;
    saturated += rate > 1.0 ? design.weights_ms[i] * rate : 0.0;
  }
  if (saturated > 0.2 * total) {
    estimate.limits.push_back(
        plain_number(100.0 * saturated / total, "%.0f") +
        " % of the expected spikes fall where the hazard exceeds 1 per ms: spikes are nearly "
        "certain there, and Delta rests on the rest");
  }
}

void say_choices(const CellFit& fit, Estimate& estimate) {
  const Exposure& exposure = fit.exposure;
  if (!fit.options->before) {
    const double whole = exposure.left_out_ms + exposure.analysed_ms;
    estimate.notes.push_back("the first " + plain_number(fit.coordinates().support_ms(), "%.4g") +
                             " ms of every sweep are left out because their past is unknown: " +
                             plain_number(exposure.left_out_ms / 1000.0, "%.3g") + " s (" +
                             plain_number(100.0 * exposure.left_out_ms / whole, "%.2g") +
                             " % of the time) and " + std::to_string(exposure.left_out_spikes) +
                             " spikes");
    if (exposure.left_out_ms > 0.3 * whole) {
      estimate.limits.push_back(
          "more than 30 % of the data went into lead-ins: shorten the kernels "
          "or say with --before what the input was before a sweep");
    }
  } else {
    estimate.notes.push_back(
        "the input before every sweep is taken as told, and no spikes are assumed before it");
  }
  if (fit.joint()) {
    estimate.notes.push_back(
        "the potential is read every " + plain_number(fit.likelihood->voltage().step_ms) +
        " ms, from " + plain_number(fit.variant->mask_before_ms) + " ms before to " +
        plain_number(fit.variant->mask_after_ms) + " ms after each spike left out: " +
        plain_number(fit.likelihood->voltage().used_ms / 1000.0) + " s in use");
    if (fit.options->anchor) {
      estimate.notes.push_back("the anchor was not needed: the potential gives the mV scale");
    }
  }
  if (!fit.smoothing_settled) {
    estimate.limits.push_back("the choice of smoothing did not settle; compare with a given one");
  }
  if (fit.starts > 1) {
    estimate.notes.push_back(std::to_string(fit.starts_agreeing) + " of " +
                             std::to_string(fit.starts) + " starts ended at the same maximum");
    if (fit.starts_agreeing == 1) {
      estimate.limits.push_back(
          "no second start found the same maximum: there may be a better one");
    }
  }
  if (fit.node_error.expected_spikes_error > fit.node_error.allowed) {
    estimate.limits.push_back("the hazard's integral is off by " +
                              plain_number(fit.node_error.expected_spikes_error) +
                              " expected spikes even after refinement");
  }
}

}  // namespace

void describe_limits(CellFit& fit, Estimate& estimate) {
  if (!trustworthy(estimate.status)) {
    // Numbers of a fit that failed its gate would only mislead; what is wrong can still be said.
    say_twins(fit, estimate);
    say_flat_direction(fit, estimate);
    return;
  }
  say_mode(fit, estimate);
  say_spikes(fit, estimate);
  say_refractory(fit, estimate);
  say_undetermined_lags(estimate);
  say_unfinished(fit, estimate);
  say_twins(fit, estimate);
  say_unbounded(estimate);
  say_ties(fit, estimate);
  say_flat_direction(fit, estimate);
  say_saturation(fit, estimate);
  say_misspecification(fit, estimate);
  say_choices(fit, estimate);
}

}  // namespace softsill

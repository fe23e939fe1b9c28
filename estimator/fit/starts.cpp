#include <algorithm>
#include <cmath>

#include "estimator/fit/fit_steps.hpp"
#include "softsill/random.hpp"

namespace softsill {
namespace {

constexpr double other_softness = 1.5;
constexpr double same_optimum = 1e-3;  // nats

/// Shifts the constant so that as many spikes are expected as there are: whatever else a start gets
/// wrong, the likelihood is then finite.
void calibrate_constant(const CellObjective& objective, std::size_t spikes, Vector& theta) {
  const Coordinates& coordinates = objective.coordinates();
  const Mapped m = coordinates.map(theta);
  const SpikeDesign& design = objective.design();
  const Vector x = predictor(design.nodes, m.beta);
  auto expected = [&](double shift) {
    double sum = 0.0;
    for (Eigen::Index i = 0; i < x.size(); ++i) {
      sum += design.weights_ms[i] * escape_rate(m.escape, std::min(x[i] + shift, 300.0));
    }
    return sum;
  };
  double low = -x.maxCoeff() - 60.0, high = -x.maxCoeff() + 60.0;
  for (int i = 0; i < 60; ++i) {
    const double middle = 0.5 * (low + high);
    (expected(middle) < static_cast<double>(spikes) ? low : high) = middle;
  }
  if (coordinates.joint()) {
    theta[coordinates.index("theta_0/Delta")] -= low;
  } else {
    theta[0] += low;
  }
}

/// The potential alone at the coordinates' present time constants, lightly smoothed.
VoltageFit first_voltage_fit(const Coordinates& coordinates, const VoltageStatistics& statistics) {
  const auto width = static_cast<Eigen::Index>(coordinates.voltage_columns().width);
  Matrix penalty = Matrix::Zero(width, width);
  for (const KernelPart& part : coordinates.parts()) {
    if (part.penalised() && part.voltage_block >= 0) {
      const Penalty rough = roughness_penalty(part.name, 0, part.size());
      const Eigen::Index first = coordinates.voltage_column(part);
      const auto n = static_cast<Eigen::Index>(part.size());
      penalty.block(first, first, n, n) = 1e-4 *
                                          statistics.total.mean.block(first, first, n, n).trace() /
                                          rough.matrix.trace() * rough.matrix;
    }
  }
  hold_derivative_columns(coordinates.voltage_columns(), statistics, penalty);
  return fit_voltage(statistics, penalty);
}

/// Other time constants and own parameters, with a random stream of its own per start.
Vector scattered_nonlinear(const Coordinates& coordinates, std::uint64_t seed, int index) {
  RandomStream random(seed, static_cast<std::uint64_t>(index));
  Vector theta = coordinates.neutral_start();
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    const std::string& name = coordinates.names()[i];
    const auto at = static_cast<Eigen::Index>(i);
    if (coordinates.is_time_constant(i)) {
      theta[at] += random.normal();
    } else if (name == "log_lambda_0" || name == "log_exponent") {
      theta[at] += 0.5 * random.normal();
    }
  }
  return theta;
}

}  // namespace

Vector fresh_start(CellFit& fit, const Pilot& pilot, const Vector& nonlinear) {
  fit.likelihood->refresh(nonlinear);
  const Coordinates& coordinates = fit.coordinates();
  VoltageFit voltage;
  if (coordinates.joint()) {
    voltage = first_voltage_fit(coordinates, fit.likelihood->voltage());
  }
  Vector start = starting_values(coordinates, pilot.objective->coordinates(), pilot.minimum,
                                 &voltage, pilot.at_spikes, nonlinear);
  calibrate_constant(*fit.likelihood, fit.exposure.spikes, start);
  return start;
}

Vector threshold_first(CellFit& fit, const Vector& start) {
  const Coordinates& coordinates = fit.coordinates();
  if (!coordinates.joint()) {
    return start;
  }
  MinimizerOptions options = fit.minimizer_options();
  options.decrement = 1e-2;
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    const std::string& name = coordinates.names()[i];
    options.fixed[i] = !(name == "b" || name == "theta_0/Delta" || name.rfind("theta_1[", 0) == 0);
  }
  const Minimum found = minimize(*fit.penalised, start, options);
  return found.finite ? found.theta : start;
}

bool needs_starts(const Coordinates& coordinates, const Variant& variant) {
  return coordinates.free_time_constants() > 0 || !escape_is_concave(variant.escape.kind) ||
         coordinates.index("log_lambda_0") >= 0 || coordinates.index("log_exponent") >= 0;
}

void try_starts(CellFit& fit, const Pilot& pilot, const Vector& first, Progress& progress) {
  MinimizerOptions options = fit.minimizer_options();
  options.decrement = 1e-4;
  // A start that is still far off after this many steps is a bad one.
  options.max_iterations = std::min(options.max_iterations, 60);
  std::vector<double> values;
  for (int i = 0; i < fit.options->starts; ++i) {
    progress.tick();
    const Vector start =
        i == 0
            ? first
            : threshold_first(
                  fit, fresh_start(fit, pilot,
                                   scattered_nonlinear(fit.coordinates(), fit.options->seed, i)));
    const Minimum found = minimize(*fit.penalised, start, options);
    if (i == 0 || (found.finite && !(fit.minimum.value <= found.value))) {
      fit.minimum = found;
    }
    if (found.finite) {
      values.push_back(found.value);
    }
  }
  fit.starts = fit.options->starts;
  fit.starts_agreeing =
      static_cast<int>(std::count_if(values.begin(), values.end(), [&](double value) {
        return value < fit.minimum.value + same_optimum;
      }));
}

void try_other_softness(CellFit& fit) {
  const std::ptrdiff_t b = fit.coordinates().index("b");
  Vector start = fit.minimum.theta;
  // A harder threshold with the same hazard where it fires: x -> 1.5 (x - mean) + mean.
  const double at_spikes =
      predictor(fit.likelihood->design().spikes, fit.coordinates().map(start).beta).mean();
  start[b] *= other_softness;
  for (std::size_t i = 0; i < fit.coordinates().size(); ++i) {
    if (fit.coordinates().names()[i].rfind("theta_1[", 0) == 0) {
      start[static_cast<Eigen::Index>(i)] *= other_softness;
    }
  }
  double& threshold = start[fit.coordinates().index("theta_0/Delta")];
  threshold = other_softness * threshold + (other_softness - 1.0) * at_spikes;
  MinimizerOptions options = fit.minimizer_options();
  options.decrement = 1e-4;
  const Minimum other = minimize(*fit.penalised, start, options);
  ++fit.starts;
  if (other.finite && other.value < fit.minimum.value - same_optimum) {
    fit.minimum = minimize(*fit.penalised, other.theta, fit.minimizer_options());
  } else if (other.finite && other.value < fit.minimum.value + same_optimum) {
    ++fit.starts_agreeing;
  }
}

void hold_edges(CellFit& fit) {
  for (int round = 0; round < 3; ++round) {
    bool any = false;
    for (std::size_t i = 0; i < fit.coordinates().size(); ++i) {
      if (!fit.fixed[i] &&
          fit.coordinates().at_edge(i, fit.minimum.theta[static_cast<Eigen::Index>(i)])) {
        fit.fixed[i] = true;
        any = true;
      }
    }
    if (!any) {
      return;
    }
    fit.minimum = minimize(*fit.penalised, fit.minimum.theta, fit.minimizer_options());
  }
}

}  // namespace softsill

#include <algorithm>
#include <cmath>

#include "estimator/fit/fit_steps.hpp"
#include "estimator/fit/smoothing.hpp"

namespace softsill {
namespace {

constexpr double pilot_cell_ms = 2.0;
constexpr double longest_pilot_support_ms = 500.0;
constexpr double separated_ridge = 0.04;  // prior sd of 5 units of Delta

void set_given_smoothing(const SmoothingPlan& plan, std::vector<Penalty>& penalties) {
  for (Penalty& penalty : penalties) {
    penalty.chosen = plan.automatic;
    if (!plan.automatic) {
      penalty.lambda = penalty.name == "kappa"     ? plan.kappa
                       : penalty.name == "theta_1" ? plan.theta_1
                                                   : plan.eta;
    }
  }
}

}  // namespace

std::vector<Penalty> penalties_for(const Coordinates& coordinates, const Matrix& information) {
  std::vector<Penalty> penalties;
  for (const KernelPart& part : coordinates.parts()) {
    if (!part.penalised()) {
      continue;
    }
    Penalty penalty = roughness_penalty(part.name, part.first, part.size());
    const auto first = static_cast<Eigen::Index>(part.first);
    const auto n = static_cast<Eigen::Index>(part.size());
    penalty.lambda = std::max(
        1e-8, 1e-2 * information.block(first, first, n, n).trace() / penalty.matrix.trace());
    penalties.push_back(std::move(penalty));
  }
  return penalties;
}

void take_pilot_smoothing(const std::vector<Penalty>& pilot, double b,
                          std::vector<Penalty>& penalties) {
  for (Penalty& penalty : penalties) {
    for (const Penalty& from : pilot) {
      const bool history = from.name == "eta_minus_theta_1" && penalty.name != "kappa";
      if (from.matrix.rows() == penalty.matrix.rows() && from.chosen &&
          (from.name == penalty.name || history)) {
        // Coefficients in mV are b times smaller in units of Delta.
        penalty.lambda = from.lambda * (penalty.name == "theta_1" ? 1.0 : b * b);
      }
    }
  }
}

int bound_separated_columns(const CellObjective& objective, std::vector<Penalty>& penalties) {
  int found = 0;
  const Coordinates& coordinates = objective.coordinates();
  for (const KernelPart& part : coordinates.parts()) {
    if (part.name == "kappa" || part.penalised()) {
      continue;
    }
    const Eigen::Index first = coordinates.spike_column(part);
    for (std::size_t j = 0; j < part.size(); ++j) {
      const auto column = first + static_cast<Eigen::Index>(j);
      if (objective.design().spikes.col(column).cwiseAbs().sum() > 0.0 ||
          objective.design().nodes.col(column).cwiseAbs().sum() == 0.0) {
        continue;
      }
      Penalty ridge;
      ridge.name = part.name + " (no spikes there)";
      ridge.first = part.first + j;
      ridge.matrix = Matrix::Identity(1, 1);
      ridge.lambda = separated_ridge;
      ridge.rank = 1;
      ridge.chosen = false;
      penalties.push_back(std::move(ridge));
      ++found;
    }
  }
  return found;
}

void prepare_penalties(const CellFit& fit, const Pilot& pilot, const Vector& start,
                       std::vector<Penalty>& penalties) {
  const double b = fit.joint() ? start[fit.coordinates().index("b")] : 1.0;
  take_pilot_smoothing(pilot.penalties, b, penalties);
  set_given_smoothing(fit.variant->smoothing, penalties);
  bound_separated_columns(*fit.likelihood, penalties);
}

Pilot run_pilot(const Variant& variant, const Exposure& exposure, int threads, Progress& progress) {
  Variant simple = variant;
  simple.escape = Escape{};
  simple.fit_lambda_0 = simple.fit_exponent = false;
  for (KernelPlan* plan : {&simple.kappa, &simple.eta, &simple.theta_1}) {
    if (plan->family == KernelFamily::exponentials || plan->family == KernelFamily::steps) {
      // Penalised splines are safe on any data; the curves are handed over, not coefficients.
      KernelPlan spline;
      spline.support_ms = std::min(basis_of(*plan).support_ms, longest_pilot_support_ms);
      *plan = spline;
    }
  }
  Pilot pilot;
  NodePlan plan{&exposure, place_nodes(graded_cells(exposure, pilot_cell_ms, CellRule::midpoint)),
                1000.0};
  pilot.objective = std::make_unique<CellObjective>(Coordinates(simple, false, false),
                                                    std::move(plan), VoltageStatistics{}, threads);
  Vector start = pilot.objective->coordinates().neutral_start();
  start[0] = std::log(static_cast<double>(exposure.spikes) / exposure.at_risk_ms);
  const Matrix information = pilot.objective->evaluate(start, Want::derivatives).hessian;
  std::vector<Penalty> penalties = penalties_for(pilot.objective->coordinates(), information);
  bound_separated_columns(*pilot.objective, penalties);
  Penalised penalised(*pilot.objective, penalties);
  SmoothingOptions options;
  options.rounds = 3;
  options.exact = false;
  options.minimizer.decrement = 1e-3;  // a pilot needs no more
  options.minimizer.keep_going = [&] { return progress.keep_going(); };
  pilot.minimum = choose_smoothing(penalised, start, options).minimum;
  pilot.penalties = penalised.penalties();
  progress.tick();
  const Mapped mapped = pilot.objective->coordinates().map(pilot.minimum.theta);
  pilot.at_nodes = predictor(pilot.objective->design().nodes, mapped.beta);
  pilot.at_spikes = predictor(pilot.objective->design().spikes, mapped.beta);
  return pilot;
}

}  // namespace softsill

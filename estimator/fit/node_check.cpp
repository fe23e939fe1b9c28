#include <algorithm>
#include <cmath>
#include <numeric>

#include "estimator/fit/fit_steps.hpp"

namespace softsill {
namespace {

constexpr double allowed_integral_error = 0.02;  // times sqrt(spikes)
constexpr double allowed_shift = 0.05;           // standard errors
constexpr int most_refinements = 4;

/// Measured error of the present nodes, and which cells carry it.
struct NodeCheck {
  NodeError error;
  std::vector<double> cell_difference;  ///< expected spikes, finer minus present
};

Vector rates_at(const SpikeDesign& design, const Mapped& m) {
  Vector rate = design.nodes * m.beta;
  for (double& x : rate) {
    x = escape_rate(m.escape, x);
  }
  return rate;
}

/// Compares the nodes with finer ones everywhere, at the present estimate.
NodeCheck check_nodes(CellFit& fit) {
  CellObjective& likelihood = *fit.likelihood;
  const Mapped m = likelihood.coordinates().map(fit.minimum.theta);
  NodePlan plan = likelihood.plan();
  plan.nodes = place_nodes(finer_cells(plan.nodes.cells));
  const SpikeDesign finer =
      make_design(likelihood.coordinates().spike_columns(), plan, likelihood.threads());
  const Vector coarse_rate = rates_at(likelihood.design(), m), fine_rate = rates_at(finer, m);
  const std::vector<double> coarse = cell_integrals(likelihood.plan().nodes, coarse_rate);
  const std::vector<double> fine = cell_integrals(plan.nodes, fine_rate);
  NodeCheck check;
  check.cell_difference = coarse;
  std::size_t part = 0, index = 0;
  double total = 0.0;
  for (const SweepCells& sweep : likelihood.plan().nodes.cells) {
    for (const Cell& cell : sweep) {
      double sum = fine[part++];
      if (cell.rule == CellRule::two_point) {
        sum += fine[part++];
      }
      check.cell_difference[index] = sum - coarse[index];
      total += check.cell_difference[index++];
    }
  }
  check.error.nodes = likelihood.plan().nodes.size();
  check.error.expected_spikes_error = std::abs(total);
  check.error.allowed =
      allowed_integral_error * std::sqrt(static_cast<double>(fit.exposure.spikes));
  // The same spikes are in both, so scores differ by the integrals' derivatives alone.
  auto score = [&](const SpikeDesign& design) {
    return evaluate_spikes(design, m.escape, m.beta, Want::gradient, likelihood.threads()).gradient;
  };
  const Vector shift =
      fit.covariance * (m.beta_jacobian.transpose() * (score(finer) - score(likelihood.design())));
  for (Eigen::Index i = 0; i < shift.size(); ++i) {
    if (fit.covariance(i, i) > 0.0) {
      check.error.largest_shift_in_se = std::max(
          check.error.largest_shift_in_se, std::abs(shift[i]) / std::sqrt(fit.covariance(i, i)));
    }
  }
  return check;
}

/// The cells with the largest errors, so that the rest together stays far below what is allowed.
std::vector<bool> worst_cells(const NodeCheck& check) {
  const std::size_t n = check.cell_difference.size();
  std::vector<std::size_t> order(n);
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::stable_sort(order.begin(), order.end(), [&](std::size_t a, std::size_t b) {
    return std::abs(check.cell_difference[a]) < std::abs(check.cell_difference[b]);
  });
  std::vector<bool> chosen(n, false);
  double kept = 0.0;
  for (std::size_t i = 0; i < n; ++i) {
    kept += std::abs(check.cell_difference[order[i]]);
    // At least the worst eighth goes, for errors of the score that cancel in the integral.
    chosen[order[i]] = kept > 0.2 * check.error.allowed || i >= n - n / 8;
  }
  return chosen;
}

}  // namespace

void settle_nodes(CellFit& fit, Progress& progress) {
  for (int round = 0;; ++round) {
    progress.tick();
    fit.covariance = inverse_information(fit.minimum.hessian, fit.fixed);
    const NodeCheck check = check_nodes(fit);
    fit.node_error = check.error;
    const bool good = fit.node_error.expected_spikes_error <= fit.node_error.allowed &&
                      fit.node_error.largest_shift_in_se <= allowed_shift;
    if (good || round == most_refinements) {
      return;
    }
    fit.likelihood->set_nodes(
        place_nodes(finer_cells(fit.likelihood->plan().nodes.cells, worst_cells(check))));
    fit.minimum = minimize(*fit.penalised, fit.minimum.theta, fit.minimizer_options());
    if (!fit.minimum.finite) {
      return;
    }
  }
}

}  // namespace softsill

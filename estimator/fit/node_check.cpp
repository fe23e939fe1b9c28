#include <algorithm>
#include <cmath>
#include <numeric>

#include "estimator/fit/fit_steps.hpp"
#include "estimator/fit/parallel.hpp"

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

/// Rates at the rows of a design, and the derivative of sum w rate by (beta, log lambda_0, log n).
struct IntegralTerms {
  Vector rate;
  Vector gradient;
};

IntegralTerms integral_terms(const RowMatrix& rows, const Vector& weights, const Mapped& m,
                             int threads) {
  constexpr Eigen::Index rows_per_piece = 8192;
  const Eigen::Index width = m.beta.size();
  const Eigen::Index pieces = (rows.rows() + rows_per_piece - 1) / rows_per_piece;
  IntegralTerms out{Vector(rows.rows()), Vector::Zero(width + 2)};
  Matrix gradients = Matrix::Zero(width + 2, pieces);
  parallel_for(threads, static_cast<std::size_t>(pieces), [&](std::size_t index) {
    const auto piece = static_cast<Eigen::Index>(index);
    const Eigen::Index first = piece * rows_per_piece;
    const Eigen::Index count = std::min(rows_per_piece, rows.rows() - first);
    const auto part = rows.block(first, 0, count, width);
    Vector slope = part * m.beta;
    for (Eigen::Index i = 0; i < count; ++i) {
      const EscapeDerivatives e = escape_at(m.escape, slope[i]);
      const double w = weights[first + i];
      out.rate[first + i] = e.rate;
      slope[i] = w * e.rate_x;
      gradients(width, piece) += w * e.rate;
      gradients(width + 1, piece) += w * e.rate_n;
    }
    gradients.col(piece).head(width) = part.transpose() * slope;
  });
  out.gradient = gradients.rowwise().sum();
  return out;
}

/// The cells that hold anything: all others together hold a tenth of the allowed error at most.
std::vector<bool> cells_that_matter(const std::vector<double>& integrals, double allowed) {
  std::vector<bool> chosen(integrals.size());
  const double least = 0.1 * allowed / static_cast<double>(integrals.size());
  for (std::size_t i = 0; i < integrals.size(); ++i) {
    chosen[i] = integrals[i] > least;
  }
  return chosen;
}

std::vector<SweepCells> only(const std::vector<SweepCells>& cells,
                             const std::vector<bool>& chosen) {
  std::vector<SweepCells> out;
  std::size_t index = 0;
  for (const SweepCells& sweep : cells) {
    out.emplace_back();
    for (const Cell& cell : sweep) {
      if (chosen[index++]) {
        out.back().push_back(cell);
      }
    }
  }
  return out;
}

/// Compares the nodes with finer ones, at the present estimate.
NodeCheck check_nodes(CellFit& fit) {
  CellObjective& likelihood = *fit.likelihood;
  const Mapped m = likelihood.coordinates().map(fit.minimum.theta);
  const NodeSet& nodes = likelihood.plan().nodes;
  NodeCheck check;
  check.error.nodes = nodes.size();
  check.error.allowed = allowed_node_error(fit.exposure);
  Vector weights = likelihood.design().weights_ms;
  const std::vector<double> coarse = cell_integrals(
      nodes, integral_terms(likelihood.design().nodes, weights, m, likelihood.threads()).rate);
  const std::vector<bool> chosen = cells_that_matter(coarse, check.error.allowed);
  NodePlan plan = likelihood.plan();
  plan.nodes = place_nodes(finer_cells(only(nodes.cells, chosen)));
  const SpikeDesign finer =
      make_design(likelihood.coordinates().spike_columns(), plan, likelihood.threads());
  const IntegralTerms fine_terms =
      integral_terms(finer.nodes, finer.weights_ms, m, likelihood.threads());
  const std::vector<double> fine = cell_integrals(plan.nodes, fine_terms.rate);
  check.cell_difference.assign(coarse.size(), 0.0);
  std::size_t part = 0, index = 0;
  Eigen::Index node = 0;
  double total = 0.0;
  for (const SweepCells& sweep : nodes.cells) {
    for (const Cell& cell : sweep) {
      const auto count = static_cast<Eigen::Index>(cell.rule);
      if (chosen[index]) {
        double sum = fine[part++];
        if (cell.rule == CellRule::two_point) {
          sum += fine[part++];
        }
        check.cell_difference[index] = sum - coarse[index];
        total += check.cell_difference[index];
      } else {
        weights.segment(node, count).setZero();
      }
      node += count;
      ++index;
    }
  }
  check.error.expected_spikes_error = std::abs(total);
  const Vector score_change =
      integral_terms(likelihood.design().nodes, weights, m, likelihood.threads()).gradient -
      fine_terms.gradient;
  const Vector shift = fit.covariance * (m.beta_jacobian.transpose() * score_change);
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

double allowed_node_error(const Exposure& exposure) {
  return allowed_integral_error * std::sqrt(static_cast<double>(exposure.spikes));
}

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

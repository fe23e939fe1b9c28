#pragma once

/// \file spike_likelihood.hpp
/// Log-likelihood of the spikes given a linear predictor x = row . beta:
///
///   L_S = sum_spikes log lambda(x) - sum_nodes w lambda(x)
///
/// (point process: Berman & Turner 1992; Brillinger 1988, Biol. Cybern. 59:189), or, for rows that
/// are time bins holding at most one spike, L = sum_spike_bins log(1 - exp(-w lambda)) - sum_other
/// w lambda (Bernoulli with complementary log-log link when f = exp).

#include <cstddef>
#include <vector>

#include "estimator/fit/columns.hpp"
#include "softsill/escape.hpp"

namespace softsill {

/// Everything the data contribute, as plain arrays.
struct SpikeDesign {
  /// One row per quadrature node (or empty bin). Rows padded with zeros to padded_width(columns)
  /// are read in place; others are copied on every evaluation.
  RowMatrix nodes;               ///< one row per quadrature node (or empty bin)
  Vector weights_ms;             ///< of the nodes
  RowMatrix spikes;              ///< one row per spike (or bin with a spike)
  Vector spike_bins_ms;          ///< widths of bins with a spike; empty: a point process
  std::vector<int> node_blocks;  ///< time block of each node, for the robust covariance
  std::vector<int> spike_blocks;
  int blocks = 0;

  Eigen::Index columns = 0;  ///< true width of a row; 0: rows are not padded

  Eigen::Index width() const { return columns > 0 ? columns : nodes.cols(); }
};

/// Value and derivatives by the coordinates (beta, log lambda_0, log n); matrices are symmetric and
/// complete. `information` is minus the second derivative (observed), `expected` its expectation
/// given the covariates, which is positive semidefinite at any point.
struct SpikeEvaluation {
  double log_likelihood = 0.0;
  Vector gradient;
  Matrix information;
  Matrix expected;
};

enum class Want { value, gradient, derivatives, derivatives_and_expected };

/// Minus infinity when a spike is impossible or the integral overflows (never an exception).
/// Deterministic for any number of threads.
SpikeEvaluation evaluate_spikes(const SpikeDesign& design, const Escape& escape, const Vector& beta,
                                Want want, int threads);

/// rows . beta for rows that may be padded.
Vector predictor(const RowMatrix& rows, const Vector& beta);

/// Score of each time block, blocks x (width + 2), same coordinates.
Matrix block_scores(const SpikeDesign& design, const Escape& escape, const Vector& beta);

}  // namespace softsill

#pragma once

/// \file quadrature.hpp
/// Nodes and weights for the integral of the hazard: dense where the hazard is, coarse elsewhere
/// (weighted-Poisson quadrature, Berman & Turner 1992, Appl. Stat. 41:31).

#include <cstddef>
#include <vector>

#include "estimator/fit/columns.hpp"
#include "estimator/fit/exposure.hpp"

namespace softsill {

/// Gauss-Legendre rule of one cell.
enum class CellRule : unsigned char { midpoint = 1, two_point = 2 };

struct Cell {
  double begin_ms, end_ms;
  CellRule rule;
};

/// Cells of one sweep, sorted and disjoint.
using SweepCells = std::vector<Cell>;

struct NodeSet {
  std::vector<SweepCells> cells;              ///< one entry per sweep of the exposure
  std::vector<std::vector<double>> times_ms;  ///< nodes of each sweep, sorted
  std::vector<double> weights_ms;             ///< of all nodes, sweeps one after the other
  std::size_t size() const { return weights_ms.size(); }
};

/// Cells no longer than `longest_ms`, graded finer after each spike where history kernels are
/// steep.
std::vector<SweepCells> graded_cells(const Exposure& exposure, double longest_ms, CellRule rule);

/// Places the nodes of given cells.
NodeSet place_nodes(std::vector<SweepCells> cells);

/// Cells for the next fit, from the linear predictor x of a pilot fit at the midpoints of
/// `pilot.cells` (all of CellRule::midpoint). Every cell gets the cheapest rule whose estimated
/// error stays within an equal share of the whole: one midpoint (error about L x'^2 / 24 for L
/// expected spikes and a change x' of log hazard across the cell), or two Gauss points in one or
/// more parts (about L x'^4 / 4320). Cells that hold nothing are joined. \param predictor log
/// hazard (1/ms) at the pilot's nodes \param total_error expected spikes that all cells together
/// may be off by
std::vector<SweepCells> refined_cells(const NodeSet& pilot, const Vector& predictor,
                                      double total_error);

/// Every cell made finer: a midpoint cell gets the two-point rule, others are cut into halves.
std::vector<SweepCells> finer_cells(const std::vector<SweepCells>& cells);
/// The same for chosen cells only, counted over all sweeps in order.
std::vector<SweepCells> finer_cells(const std::vector<SweepCells>& cells,
                                    const std::vector<bool>& chosen);

/// Integral of a rate over every cell, from its values at the nodes.
std::vector<double> cell_integrals(const NodeSet& nodes, const Vector& rate_at_nodes);

}  // namespace softsill

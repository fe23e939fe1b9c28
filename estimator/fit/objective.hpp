#pragma once

/// \file objective.hpp
/// What is minimised: minus the log-likelihood plus quadratic penalties, as a function of theta.

#include <functional>
#include <string>
#include <vector>

#include "estimator/fit/coordinates.hpp"
#include "estimator/fit/quadrature.hpp"
#include "estimator/fit/spike_likelihood.hpp"
#include "estimator/fit/voltage_likelihood.hpp"

namespace softsill {

/// Quadratic penalty lambda/2 c^T S c on a stretch c of theta.
struct Penalty {
  std::string name;
  std::size_t first = 0;
  Matrix matrix;  ///< S
  double lambda = 1.0;
  Eigen::Index rank = 0;         ///< of S
  double log_determinant = 0.0;  ///< log of the product of S's positive eigenvalues
  bool chosen = true;            ///< false: lambda is fixed, not to be chosen from the data
};

/// S = D^T D of second differences, the kernel's zero end included: full rank, determinant 1
/// (P-splines, Eilers & Marx 1996, Stat. Sci. 11:89).
Penalty roughness_penalty(const std::string& name, std::size_t first, std::size_t count);

/// Minus log-likelihood with derivatives. A value that is not finite means: impossible here.
struct Evaluated {
  double value = 0.0;
  Vector gradient;
  Matrix hessian;   ///< observed information
  Matrix expected;  ///< positive semidefinite stand-in
};

/// A twice differentiable function to be minimised.
class Objective {
 public:
  virtual ~Objective() = default;
  virtual Eigen::Index size() const = 0;
  virtual Evaluated evaluate(const Vector& theta, Want want) = 0;
};

/// An objective plus penalties.
class Penalised : public Objective {
 public:
  Penalised(Objective& likelihood, std::vector<Penalty> penalties)
      : likelihood_(likelihood), penalties_(std::move(penalties)) {}
  Eigen::Index size() const override { return likelihood_.size(); }
  Evaluated evaluate(const Vector& theta, Want want) override;

  Objective& likelihood() { return likelihood_; }
  std::vector<Penalty>& penalties() { return penalties_; }
  const std::vector<Penalty>& penalties() const { return penalties_; }
  /// Sum of lambda S on the whole of theta.
  Matrix penalty_matrix() const;

 private:
  Objective& likelihood_;
  std::vector<Penalty> penalties_;
};

/// Where nodes and spikes lie, so that columns can be filled again for new time constants.
struct NodePlan {
  const Exposure* exposure = nullptr;
  NodeSet nodes;
  double block_ms = 1000.0;  ///< time blocks of the robust covariance
};

/// Fills the design of a node plan.
SpikeDesign make_design(const Columns& columns, const NodePlan& plan, int threads);

/// The likelihood of one cell.
class CellObjective : public Objective {
 public:
  /// \param statistics empty for spikes alone
  CellObjective(Coordinates coordinates, NodePlan plan, VoltageStatistics statistics, int threads);

  /// The same nodes under other coordinates whose spike columns are the same.
  CellObjective(Coordinates coordinates, NodePlan plan, SpikeDesign design, int threads);

  Eigen::Index size() const override { return static_cast<Eigen::Index>(coordinates_.size()); }
  Evaluated evaluate(const Vector& theta, Want want) override;

  const Coordinates& coordinates() const { return coordinates_; }
  const SpikeDesign& design() const { return design_; }
  const VoltageStatistics& voltage() const { return statistics_; }
  const NodePlan& plan() const { return plan_; }
  /// How to gather the voltage again when time constants move; set once for such fits.
  void set_voltage_gatherer(std::function<VoltageStatistics(const Columns&)> gather) {
    gather_ = std::move(gather);
  }
  /// Replaces the nodes (refinement).
  void set_nodes(NodeSet nodes);
  /// Brings columns up to date with theta's time constants.
  void refresh(const Vector& theta);
  /// Log-likelihood of the spikes alone at theta.
  double spike_log_likelihood(const Vector& theta);
  /// Score of every time block at theta, blocks x theta, penalty not included.
  Matrix scores(const Vector& theta);
  int threads() const { return threads_; }

 private:
  Coordinates coordinates_;
  NodePlan plan_;
  SpikeDesign design_;
  VoltageStatistics statistics_;
  std::function<VoltageStatistics(const Columns&)> gather_;
  int threads_;
};

}  // namespace softsill

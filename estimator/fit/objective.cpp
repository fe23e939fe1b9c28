#include "estimator/fit/objective.hpp"

#include <cmath>

#include "estimator/fit/parallel.hpp"
#include "estimator/fit/row_sums.hpp"

namespace softsill {

Penalty roughness_penalty(const std::string& name, std::size_t first, std::size_t count) {
  const auto n = static_cast<Eigen::Index>(count);
  // Row j: c_j - 2 c_{j+1} + c_{j+2}, with the two coefficients behind the last held at 0.
  Matrix difference = Matrix::Zero(n, n);
  for (Eigen::Index j = 0; j < n; ++j) {
    difference(j, j) = 1.0;
    if (j + 1 < n) {
      difference(j, j + 1) = -2.0;
    }
    if (j + 2 < n) {
      difference(j, j + 2) = 1.0;
    }
  }
  Penalty penalty;
  penalty.name = name;
  penalty.first = first;
  penalty.matrix = difference.transpose() * difference;
  penalty.rank = n;
  return penalty;
}

Evaluated Penalised::evaluate(const Vector& theta, Want want) {
  Evaluated out = likelihood_.evaluate(theta, want);
  for (const Penalty& penalty : penalties_) {
    const auto first = static_cast<Eigen::Index>(penalty.first);
    const Eigen::Index n = penalty.matrix.rows();
    const Vector pull = penalty.lambda * (penalty.matrix * theta.segment(first, n));
    out.value += 0.5 * theta.segment(first, n).dot(pull);
    if (want == Want::value) {
      continue;
    }
    out.gradient.segment(first, n) += pull;
    out.hessian.block(first, first, n, n) += penalty.lambda * penalty.matrix;
    if (want == Want::derivatives_and_expected) {
      out.expected.block(first, first, n, n) += penalty.lambda * penalty.matrix;
    }
  }
  return out;
}

Matrix Penalised::penalty_matrix() const {
  Matrix sum = Matrix::Zero(size(), size());
  for (const Penalty& penalty : penalties_) {
    const auto first = static_cast<Eigen::Index>(penalty.first);
    const Eigen::Index n = penalty.matrix.rows();
    sum.block(first, first, n, n) += penalty.lambda * penalty.matrix;
  }
  return sum;
}

SpikeDesign make_design(const Columns& columns, const NodePlan& plan, int threads) {
  SpikeDesign design;
  const auto width = static_cast<Eigen::Index>(padded_width(columns.width));
  design.columns = static_cast<Eigen::Index>(columns.width);
  design.nodes.setZero(static_cast<Eigen::Index>(plan.nodes.size()), width);
  design.spikes.setZero(static_cast<Eigen::Index>(plan.exposure->spikes), width);
  design.weights_ms = Eigen::Map<const Vector>(plan.nodes.weights_ms.data(),
                                               static_cast<Eigen::Index>(plan.nodes.size()));
  Eigen::Index node = 0, spike = 0;
  int first_block = 0;
  for (std::size_t i = 0; i < plan.exposure->sweeps.size(); ++i) {
    const SweepExposure& part = plan.exposure->sweeps[i];
    const std::vector<double>& times = plan.nodes.times_ms[i];
    const RowFiller filler(columns, part, static_cast<std::size_t>(width));
    filler.fill(times, design.nodes.data() + node * width, threads);
    filler.fill(part.spikes_ms, design.spikes.data() + spike * width, threads);
    auto block_of = [&](double t) {
      return first_block + static_cast<int>((t - part.sweep->start_ms) / plan.block_ms);
    };
    for (double t : times) {
      design.node_blocks.push_back(block_of(t));
    }
    for (double t : part.spikes_ms) {
      design.spike_blocks.push_back(block_of(t));
    }
    node += static_cast<Eigen::Index>(times.size());
    spike += static_cast<Eigen::Index>(part.spikes_ms.size());
    first_block += static_cast<int>(part.sweep->duration_ms() / plan.block_ms) + 1;
  }
  design.blocks = first_block;
  return design;
}

CellObjective::CellObjective(Coordinates coordinates, NodePlan plan, VoltageStatistics statistics,
                             int threads)
    : coordinates_(std::move(coordinates)),
      plan_(std::move(plan)),
      statistics_(std::move(statistics)),
      threads_(threads) {
  design_ = make_design(coordinates_.spike_columns(), plan_, threads_);
}

CellObjective::CellObjective(Coordinates coordinates, NodePlan plan, SpikeDesign design,
                             int threads)
    : coordinates_(std::move(coordinates)),
      plan_(std::move(plan)),
      design_(std::move(design)),
      threads_(threads) {}

void CellObjective::set_nodes(NodeSet nodes) {
  plan_.nodes = std::move(nodes);
  design_ = make_design(coordinates_.spike_columns(), plan_, threads_);
}

void CellObjective::refresh(const Vector& theta) {
  if (coordinates_.free_time_constants() == 0 || !coordinates_.take_time_constants(theta)) {
    return;
  }
  design_ = make_design(coordinates_.spike_columns(), plan_, threads_);
  if (gather_) {
    statistics_ = gather_(coordinates_.voltage_columns());
  }
}

Evaluated CellObjective::evaluate(const Vector& theta, Want want) {
  Evaluated out;
  if (!theta.allFinite()) {
    out.value = std::numeric_limits<double>::infinity();
    return out;
  }
  refresh(theta);
  const Mapped m = coordinates_.map(theta);
  const SpikeEvaluation spikes = evaluate_spikes(design_, m.escape, m.beta, want, threads_);
  out.value = -spikes.log_likelihood;
  VoltageEvaluation voltage;
  if (coordinates_.joint()) {
    voltage = evaluate_voltage(statistics_, m.v, m.log_sigma, m.atanh_rho);
    out.value -= voltage.log_likelihood;
  }
  if (want == Want::value) {
    return out;
  }
  const Matrix& jb = m.beta_jacobian;
  const Matrix& jv = m.v_jacobian;
  out.gradient = -(jb.transpose() * spikes.gradient);
  out.hessian = jb.transpose() * spikes.information * jb;
  Vector v_weight;
  if (coordinates_.joint()) {
    out.gradient -= jv.transpose() * voltage.gradient;
    out.hessian += jv.transpose() * voltage.information * jv;
    v_weight = -voltage.gradient.head(m.v.size());
  }
  coordinates_.add_curvature(theta, -spikes.gradient.head(m.beta.size()), v_weight, out.hessian);
  if (want == Want::derivatives_and_expected) {
    out.expected = jb.transpose() * spikes.expected * jb;
    if (coordinates_.joint()) {
      out.expected += jv.transpose() * voltage.expected * jv;
    }
  }
  return out;
}

double CellObjective::spike_log_likelihood(const Vector& theta) {
  refresh(theta);
  const Mapped m = coordinates_.map(theta);
  return evaluate_spikes(design_, m.escape, m.beta, Want::value, threads_).log_likelihood;
}

Matrix CellObjective::scores(const Vector& theta) {
  refresh(theta);
  const Mapped m = coordinates_.map(theta);
  Matrix out = block_scores(design_, m.escape, m.beta) * m.beta_jacobian;
  if (coordinates_.joint()) {
    out += block_scores(statistics_, m.v, m.log_sigma, m.atanh_rho) * m.v_jacobian;
  }
  return out;
}

}  // namespace softsill

#include "estimator/fit/quadrature.hpp"

#include <algorithm>
#include <cmath>

namespace softsill {
namespace {

/// A cell may be this long plus this share of the time since the last spike.
constexpr double shortest_after_spike_ms = 0.5;
constexpr double growth_after_spike = 0.25;
constexpr int most_parts = 16;
/// Measured on cells of 0.5-2 mV noise: the estimates below are, all together, about twice too
/// large.
constexpr double caution = 0.5;
/// Cells that hold less than their own error share are joined.
constexpr double nothing = 1.0;
constexpr double longest_quiet_cell_ms = 8.0;
constexpr double two_point_offset = 0.28867513459481287;  // 1 / (2 sqrt 3)

}  // namespace

std::vector<SweepCells> graded_cells(const Exposure& exposure, double longest_ms, CellRule rule) {
  std::vector<SweepCells> all;
  for (const SweepExposure& part : exposure.sweeps) {
    SweepCells cells;
    const std::vector<double>& spikes = part.sweep->spikes_ms;
    for (const Interval& stretch : part.at_risk) {
      const auto after = std::upper_bound(spikes.begin(), spikes.end(), stretch.begin_ms);
      const double last_spike =
          after == spikes.begin() ? stretch.begin_ms - 100.0 * longest_ms : *(after - 1);
      double from = stretch.begin_ms;
      while (from < stretch.end_ms) {
        const double length = std::min(
            longest_ms, shortest_after_spike_ms + growth_after_spike * (from - last_spike));
        double to = from + length;
        // No crumbs: a rest under half a cell joins this one.
        if (stretch.end_ms - to < 0.5 * length) {
          to = stretch.end_ms;
        }
        cells.push_back({from, to, rule});
        from = to;
      }
    }
    all.push_back(std::move(cells));
  }
  return all;
}

NodeSet place_nodes(std::vector<SweepCells> cells) {
  NodeSet set;
  for (const SweepCells& sweep : cells) {
    std::vector<double> times;
    times.reserve(sweep.size() * 2);
    for (const Cell& cell : sweep) {
      const double length = cell.end_ms - cell.begin_ms;
      const double middle = 0.5 * (cell.begin_ms + cell.end_ms);
      if (cell.rule == CellRule::midpoint) {
        times.push_back(middle);
        set.weights_ms.push_back(length);
      } else {
        times.push_back(middle - two_point_offset * length);
        times.push_back(middle + two_point_offset * length);
        set.weights_ms.push_back(0.5 * length);
        set.weights_ms.push_back(0.5 * length);
      }
    }
    set.times_ms.push_back(std::move(times));
  }
  set.cells = std::move(cells);
  return set;
}

std::vector<SweepCells> refined_cells(const NodeSet& pilot, const Vector& predictor,
                                      double total_error) {
  std::vector<SweepCells> all;
  const double share = total_error / static_cast<double>(pilot.size());
  Eigen::Index node = 0;
  for (const SweepCells& sweep : pilot.cells) {
    SweepCells cells;
    bool joinable = false;
    const auto n = static_cast<Eigen::Index>(sweep.size());
    for (Eigen::Index i = 0; i < n; ++i) {
      const Cell& cell = sweep[static_cast<std::size_t>(i)];
      const double here = predictor[node + i];
      double highest = here, change = 0.0;
      for (Eigen::Index other : {i - 1, i + 1}) {
        if (other >= 0 && other < n) {
          // Neighbours across a refractory time are no guide to the slope.
          const Cell& next = sweep[static_cast<std::size_t>(other)];
          const bool touches = next.end_ms == cell.begin_ms || next.begin_ms == cell.end_ms;
          if (touches) {
            const double there = predictor[node + other];
            highest = std::max(highest, there);
            change = std::max(change, std::abs(there - here));
          }
        }
      }
      const double length = cell.end_ms - cell.begin_ms;
      const double held = length * std::exp(std::min(highest, 50.0));
      if (held * std::exp(std::min(change, 50.0)) < nothing * share) {
        if (joinable && cells.back().end_ms == cell.begin_ms &&
            cell.end_ms - cells.back().begin_ms <= longest_quiet_cell_ms) {
          cells.back().end_ms = cell.end_ms;
        } else {
          cells.push_back({cell.begin_ms, cell.end_ms, CellRule::midpoint});
        }
        joinable = true;
        continue;
      }
      joinable = false;
      if (caution * held * change * change / 24.0 < share) {
        cells.push_back({cell.begin_ms, cell.end_ms, CellRule::midpoint});
        continue;
      }
      const double one_part = caution * held * std::pow(change, 4) / 4320.0;
      const int parts = static_cast<int>(
          std::clamp(std::ceil(std::pow(one_part / share, 0.25)), 1.0, double{most_parts}));
      for (int p = 0; p < parts; ++p) {
        cells.push_back({cell.begin_ms + length * p / parts,
                         cell.begin_ms + length * (p + 1) / parts, CellRule::two_point});
      }
    }
    node += n;
    all.push_back(std::move(cells));
  }
  return all;
}

std::vector<SweepCells> finer_cells(const std::vector<SweepCells>& cells,
                                    const std::vector<bool>& chosen) {
  std::vector<SweepCells> all;
  std::size_t index = 0;
  for (const SweepCells& sweep : cells) {
    SweepCells finer;
    finer.reserve(sweep.size());
    for (const Cell& cell : sweep) {
      if (!chosen[index++]) {
        finer.push_back(cell);
      } else if (cell.rule == CellRule::midpoint) {
        finer.push_back({cell.begin_ms, cell.end_ms, CellRule::two_point});
      } else {
        const double middle = 0.5 * (cell.begin_ms + cell.end_ms);
        finer.push_back({cell.begin_ms, middle, cell.rule});
        finer.push_back({middle, cell.end_ms, cell.rule});
      }
    }
    all.push_back(std::move(finer));
  }
  return all;
}

std::vector<SweepCells> finer_cells(const std::vector<SweepCells>& cells) {
  std::size_t count = 0;
  for (const SweepCells& sweep : cells) {
    count += sweep.size();
  }
  return finer_cells(cells, std::vector<bool>(count, true));
}

std::vector<double> cell_integrals(const NodeSet& nodes, const Vector& rate_at_nodes) {
  std::vector<double> out;
  Eigen::Index node = 0;
  for (const SweepCells& sweep : nodes.cells) {
    for (const Cell& cell : sweep) {
      double sum = 0.0;
      for (int i = 0; i < static_cast<int>(cell.rule); ++i, ++node) {
        sum += nodes.weights_ms[static_cast<std::size_t>(node)] * rate_at_nodes[node];
      }
      out.push_back(sum);
    }
  }
  return out;
}

}  // namespace softsill

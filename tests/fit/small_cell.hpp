#pragma once

// A few seconds of an invented cell, for tests of likelihoods. Nothing here comes from the model
// being fitted: only the arithmetic is under test.

#include <cmath>
#include <string>
#include <vector>

#include "estimator/fit/objective.hpp"
#include "softsill/random.hpp"

namespace softsill::small {

/// One sweep with current, potential and spikes.
inline Sweep sweep(const std::string& name, double start_ms, double duration_ms,
                   std::uint64_t stream) {
  RandomStream random(77, stream);
  Sweep out;
  out.name = name;
  out.start_ms = start_ms;
  out.step_ms = 0.1;
  const auto samples = static_cast<std::size_t>(std::round(duration_ms / out.step_ms));
  double current = 0.0, filtered = 0.0, noise = 0.0;
  for (std::size_t i = 0; i < samples; ++i) {
    current += -current / 30.0 + 0.3 * random.normal() / std::sqrt(15.0);
    out.input.push_back(0.2 + current);
    filtered += 0.1 / 15.0 * (80.0 * out.input.back() - filtered);
    noise = 0.95 * noise + 0.1 * random.normal();
    out.voltage_mV.push_back(-66.0 + filtered + 3.0 * current + noise);
  }
  for (double t = start_ms + 15.0; t < out.end_ms(); t += 8.0 + 40.0 * random.uniform()) {
    out.spikes_ms.push_back(t);
  }
  out.analysed = {{start_ms, out.end_ms()}};
  return out;
}

/// Two sweeps, one with a stretch left out.
inline Recording recording() {
  Recording out;
  out.cell = "small";
  out.sweeps = {sweep("a", 0.0, 1500.0, 0), sweep("b", 20.0, 900.0, 1)};
  out.sweeps[1].analysed = {{20.0, 333.3}, {400.05, 920.0}};
  return out;
}

/// Everything that an objective needs to live.
struct Cell {
  Recording recording;
  Variant variant;
  Exposure exposure;
  double block_ms = 400.0;

  Cell(Recording data, Variant plan) : recording(std::move(data)), variant(std::move(plan)) {
    FitOptions options;
    options.before = Before::first_value;
    exposure = make_exposure(recording, variant.refractory, 0.0, options);
  }
  Cell(const Cell&) = delete;

  CellObjective objective(bool joint, bool fit_series_resistance) const {
    Coordinates coordinates(variant, joint, fit_series_resistance);
    NodePlan plan{&exposure, place_nodes(graded_cells(exposure, 3.0, CellRule::two_point)),
                  block_ms};
    auto gather = [this](const Columns& columns) {
      return gather_voltage(columns, exposure, recording, variant, 0.0, block_ms, 1);
    };
    VoltageStatistics statistics;
    if (joint) {
      statistics = gather(coordinates.voltage_columns());
    }
    CellObjective out(std::move(coordinates), std::move(plan), std::move(statistics), 1);
    if (joint) {
      out.set_voltage_gatherer(gather);
    }
    return out;
  }
};

/// A point where nothing is 0 and hazards are ordinary.
inline Vector ordinary_point(const Coordinates& coordinates, std::uint64_t stream) {
  RandomStream random(78, stream);
  Vector theta = coordinates.neutral_start();
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    const std::string& name = coordinates.names()[i];
    const auto at = static_cast<Eigen::Index>(i);
    if (coordinates.is_time_constant(i) || name.starts_with("log_")) {
      theta[at] += 0.3 * random.normal();
    } else if (name == "b") {
      theta[at] = 0.6;
    } else if (name == "theta_0/Delta") {
      theta[at] = 3.5;
    } else if (name == "(E_0-theta_0)/Delta") {
      theta[at] = -3.5;
    } else if (name.starts_with("kappa")) {
      theta[at] = 0.1 + 0.2 * random.uniform();
    } else if (name == "atanh_rho") {
      theta[at] = 1.1;
    } else {
      theta[at] = 0.5 * random.normal();
    }
  }
  return theta;
}

}  // namespace softsill::small

#pragma once

/// \file simulation.hpp
/// Spike trains of a model under a given input, exact in law for the discretised hazard.
///
/// Time is cut into steps. Within a step the hazard is that of the step's middle, so it is constant
/// but for the ends of the absolute refractory time and a spike's own effect on the rest of its
/// step; spike times inside the step are continuous. A spike falls where the running integral of
/// the hazard passes a standard exponential variate (time rescaling: Brown et al. 2002, Neural
/// Comput. 14:325). Halving the step divides the error of the law by about four.
///
/// Beyond the step, these errors are made on purpose: lags of spline and step kernels are rounded
/// to 1/32 of a step (exponential kernels only until the end of a run of 64 steps; after that they
/// are exact); escape functions other than the exponential are read from a table whose relative
/// error is below 1e-6 and taken as 0 where they are below 1e-13 per ms.

#include <cstddef>
#include <cstdint>
#include <functional>
#include <optional>
#include <span>
#include <vector>

#include "softsill/model.hpp"

namespace softsill {

/// A sample-and-hold input: sample i is held over [start_ms + i step_ms, start_ms + (i + 1)
/// step_ms).
struct DrivingInput {
  std::span<const double> input;  ///< the model's input unit
  double start_ms = 0.0;
  double step_ms = 0.1;
  double before = 0.0;  ///< input at all times before start_ms

  double end_ms() const { return start_ms + step_ms * static_cast<double>(input.size()); }
};

struct SimulationOptions {
  std::size_t trials = 1;
  std::uint64_t seed = 1;     ///< trial k uses the random stream (seed, k), whatever the threads
  double step_ms = 0.1;       ///< of the simulation; the input may have another
  int threads = 0;            ///< 0: all cores. Results do not depend on it.
  bool mean_voltage = false;  ///< also return the mean of u over trials
  /// A trial is stopped as a runaway when it holds this rate, or 90 % of the ceiling that t_abs
  /// sets, over runaway_window_ms.
  double runaway_hz = 1000.0;
  double runaway_window_ms = 200.0;
  /// Called now and then, from any thread but never twice at once, with the share of trials done;
  /// return false to stop. May be empty.
  std::function<bool(double)> progress;
};

/// A trial that was stopped because its rate ran away.
struct Runaway {
  std::size_t trial = 0;
  double stopped_ms = 0.0;  ///< its train ends here
};

struct SimulationResult {
  double start_ms = 0.0, end_ms = 0.0;
  double step_ms = 0.0;
  std::vector<std::vector<double>> trains_ms;  ///< one per trial, strictly within [start, end)
  /// Mean over trials (runaways left out) of u at the middles of the steps,
  /// start_ms + (i + 1/2) step_ms, without the spikes themselves. Empty unless asked for, or when
  /// every trial ran away.
  std::vector<double> mean_voltage_mV;
  std::vector<Runaway> runaways;  ///< by trial
  bool interrupted = false;       ///< progress() said stop: trials are missing

  std::size_t spike_count() const;
  /// Spikes per second over all trials; runaways count until they were stopped.
  double mean_rate_hz() const;
  /// Coefficient of variation of the intervals of all trials together; none with fewer than two.
  std::optional<double> interval_cv() const;
};

/// Simulates `trials` independent trials that start without any past spike.
///
/// Memory: 8 bytes per step for the input's effect, shared by all trials, plus under 20 MB a
/// thread. \throws Error on an empty input or one that is not finite, on options out of range, on a
/// model
///         with coefficients that do not fit its bases, and when the mean voltage is asked of a
///         model in units of Delta
SimulationResult simulate(const Model& model, const DrivingInput& driving,
                          const SimulationOptions& options = {});

}  // namespace softsill

#pragma once

/// \file exposure.hpp
/// Which stretches of time and which spikes enter the likelihood.

#include <optional>
#include <vector>

#include "softsill/fit.hpp"
#include "softsill/recording.hpp"

namespace softsill {

/// What one sweep gives to the likelihood.
struct SweepExposure {
  const Sweep* sweep = nullptr;
  double before_value = 0.0;      ///< input before the first sample
  std::vector<Interval> at_risk;  ///< analysed, after the lead-in, outside refractory times
  std::vector<double> spikes_ms;  ///< the spikes that count
};

struct Exposure {
  std::vector<SweepExposure> sweeps;
  double refractory_ms = 0.0;
  bool refractory_estimated = false;
  double shortest_interval_ms = 0.0;  ///< infinity when no sweep has two spikes
  double at_risk_ms = 0.0;
  double analysed_ms = 0.0;  ///< including refractory times
  std::size_t spikes = 0;
  double left_out_ms = 0.0;
  std::size_t left_out_spikes = 0;
};

/// \param lead_in_ms left out at the start of every sweep when options.before is empty
/// \throws Error when nothing is left to fit
Exposure make_exposure(const Recording& recording, const RefractoryPlan& refractory,
                       double lead_in_ms, const FitOptions& options);

}  // namespace softsill

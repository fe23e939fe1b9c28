#pragma once

/// \file trial.hpp
/// One simulated trial: the loop over steps.

#include <cstddef>
#include <memory>
#include <vector>

#include "estimator/model/hazard_table.hpp"
#include "estimator/model/history_tables.hpp"
#include "softsill/random.hpp"

namespace softsill {

/// What all trials of a simulation share.
struct TrialPlan {
  double start_ms = 0.0, end_ms = 0.0, step_ms = 0.1;
  /// Per step. Exponential escape: the integral of the hazard over the step without history.
  /// Other functions: x without history.
  std::vector<double> drive;
  /// Effects of spikes on x; as factors when there is no `hazard`.
  std::unique_ptr<const HistoryTables> history;
  /// Integral of the hazard over a step as a function of x; absent for the exponential.
  std::unique_ptr<const HazardTable> hazard;
  double refractory_steps = 0.0;
  std::size_t runaway_spikes = 0;  ///< this many spikes ...
  double runaway_window_ms = 0.0;  ///< ... within this time stop the trial
};

struct TrialOutcome {
  std::vector<double> spikes_ms;
  bool runaway = false;
  double stopped_ms = 0.0;  ///< end of the trial; earlier when it ran away
};

TrialOutcome run_trial(const TrialPlan& plan, RandomStream random);

}  // namespace softsill

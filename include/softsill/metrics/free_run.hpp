#pragma once

/// \file free_run.hpp
/// A model that runs on its own spikes must keep the cell's rate and interval law. Rescaling cannot
/// show a model that runs away or falls silent: it is fed the recorded history (Gerhard, Deger &
/// Truccolo 2017, PLoS Comput. Biol. 13:e1005390).

#include <optional>
#include <string>
#include <vector>

#include "softsill/metrics/train.hpp"

namespace softsill::metrics {

struct IntervalLaw {
  double rate_hz = 0.0;
  std::size_t intervals = 0;
  std::optional<double> mean_ms, cv;  ///< absent with fewer than 2 intervals
};

/// Intervals of all trials together.
IntervalLaw interval_law(const TrialSet& set);

struct FreeRunSettings {
  double runaway_ratio = 3.0;  ///< a model trial above this many times the cell's rate ran away
  double silent_ratio = 1.0 / 3.0;  ///< one below this share of the cell's rate is silent
};

struct FreeRun {
  IntervalLaw cell, model;
  double rate_ratio = 0.0;  ///< model over cell; 0 when the cell is silent
  /// Where the cell's rate lies among model runs of as many trials: share of those further from the
  /// model's mean, (1 + as far) / (1 + runs). Absent with fewer than 20 runs.
  std::optional<double> rate_p_value;
  /// Largest distance of the two interval distributions, and its share among model runs.
  std::optional<double> interval_distance, interval_p_value;
  std::size_t runaway_trials = 0, silent_trials = 0;
  bool keeps_rate = false;  ///< ratio between silent_ratio and runaway_ratio, no runaway trials
  std::string finding;      ///< one sentence
};

/// \param model  free-running trials under the cell's input; they are cut into runs of as many
///               trials as the cell has
/// \param stopped_trials  model trials that the simulation had to stop as runaways
FreeRun compare_free_run(const TrialSet& cell, const TrialSet& model,
                         const std::vector<std::size_t>& stopped_trials = {},
                         const FreeRunSettings& settings = {});

}  // namespace softsill::metrics

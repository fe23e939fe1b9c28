#pragma once

/// \file quality.hpp
/// What was recorded and how good it is: numbers per sweep, findings with what to do.
/// All statistics are over the analysed intervals of a sweep unless said otherwise; a number that
/// is not defined for the data at hand is absent.

#include <optional>
#include <string>
#include <vector>

#include "softsill/recording.hpp"

namespace softsill {

enum class Grade {
  fine,  ///< nothing to do
  look,  ///< usable, but a person should look and decide
  stop   ///< a fit would fail or mean nothing
};
std::string_view to_string(Grade grade);

struct Finding {
  Grade grade = Grade::fine;
  std::string sweep;   ///< empty: the whole recording
  std::string topic;   ///< "spikes", "potential", "driving signal", "repeats", ...
  std::string what;    ///< one sentence
  std::string remedy;  ///< what to do; empty when fine
};

/// A trend over the recording. Blocks of equal analysed time, sweeps in the order of the sheet.
struct Drift {
  double change_per_min = 0.0;  ///< slope of the least-squares line through the blocks
  double total_change = 0.0;    ///< slope times the analysed time between first and last block
  double p_value = 1.0;         ///< two-sided, Spearman rank correlation with block order
  std::size_t blocks = 0;
};

struct InputQuality {
  double mean = 0.0, standard_deviation = 0.0;  ///< input unit
  double minimum = 0.0, maximum = 0.0;
  /// Lag at which the autocorrelation falls through 1/e. Absent for a constant signal, or when it
  /// is longer than a quarter of the stretches analysed (1.3 s at 50 kHz, longer at lower rates).
  std::optional<double> correlation_time_ms;
  /// Frequency below which 90 % of the variance lies.
  std::optional<double> bandwidth_Hz;
};

struct VoltageQuality {
  double minimum_mV = 0.0, maximum_mV = 0.0;
  /// Median away from spikes (more than 2 ms before and 10 ms after each).
  std::optional<double> median_subthreshold_mV;
  std::size_t clipped_samples = 0;       ///< samples that sit at the lowest or highest value
  std::size_t clipped_subthreshold = 0;  ///< those further than 2 ms before, 5 ms after any spike
};

struct SweepQuality {
  std::string name;
  Use use = Use::estimate;
  std::string repeats;
  double step_ms = 0.0;
  double duration_ms = 0.0;  ///< recorded
  double analysed_ms = 0.0;
  InputQuality input;
  std::optional<VoltageQuality> voltage;
  SpikeOrigin spike_origin = SpikeOrigin::given;
  std::size_t spikes = 0;
  double rate_Hz = 0.0;
  std::optional<double> interval_cv;  ///< at least 3 spikes; intervals across gaps left out
  std::optional<double> shortest_interval_ms;  ///< at least 2 spikes
  std::size_t intervals_under_2ms = 0;
};

/// What the recorded quantities let a fit say.
enum class Identifiability {
  spikes_alone,       ///< kernels in units of Delta
  spikes_anchored,    ///< the same, scaled to mV by a number the user gives
  spikes_and_voltage  ///< everything in mV
};
std::string_view to_string(Identifiability identifiability);

struct QualityReport {
  std::string cell;
  std::string input_unit;
  bool input_is_current = true;
  std::string spike_detection;  ///< in words; empty when all spikes were given
  std::vector<SweepQuality> sweeps;
  double estimate_ms = 0.0, predict_ms = 0.0;  ///< analysed time by use
  std::size_t estimate_spikes = 0, predict_spikes = 0;
  std::optional<double> interval_cv;  ///< all sweeps together
  std::size_t intervals_under_2ms = 0;
  std::optional<Drift> rate_drift;     ///< Hz
  std::optional<Drift> resting_drift;  ///< mV, median subthreshold potential
  Identifiability identifiability = Identifiability::spikes_alone;
  std::string identifiability_sentence;
  std::vector<Finding> findings;  ///< worst first

  Grade worst() const;
};

/// Never throws for the state of the data: that is what findings are for.
/// \param anchored the user will give an anchor (input resistance or Delta in mV)
QualityReport check_quality(const Recording& recording, bool anchored = false);

/// The conditions without which no fit means anything.
/// \param with_voltage false: the potential is not going to be used, so its state does not matter
/// \throws Error: no sweep to estimate from, no spikes or only one in them, a driving signal
///         that is constant in all of them, a constant or clipped potential (clipped where it is
///         away from spikes)
void require_fittable(const Recording& recording, bool with_voltage = true);

}  // namespace softsill

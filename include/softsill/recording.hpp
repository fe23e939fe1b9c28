#pragma once

/// \file recording.hpp
/// What was recorded from one cell, as plain values. Readers make it, everything else reads it.

#include <cstddef>
#include <string>
#include <vector>

namespace softsill {

/// Half-open stretch of time [begin_ms, end_ms) on a sweep's own clock.
struct Interval {
  double begin_ms = 0.0;
  double end_ms = 0.0;
  double length_ms() const { return end_ms - begin_ms; }
};

/// Whether a sweep may be seen by a fit, or is kept to be predicted.
enum class Use { estimate, predict };

/// How the spike times of a sweep came about.
enum class SpikeOrigin { given, detected };

/// One sweep: a uniformly sampled driving signal and, where recorded, the membrane potential.
///
/// Sample i of `input` is held over [start_ms + i * step_ms, start_ms + (i + 1) * step_ms).
/// `voltage_mV` is empty or as long as `input`; sample i was taken at start_ms + i * step_ms.
/// All times are on the clock of the file's time column.
struct Sweep {
  std::string name;
  double start_ms = 0.0;           ///< time of the first sample
  double step_ms = 0.0;            ///< sampling interval
  std::vector<double> input;       ///< nA, or the sheet's input_unit
  std::vector<double> voltage_mV;  ///< empty when not recorded
  std::vector<double> spikes_ms;   ///< strictly increasing, inside the sweep
  SpikeOrigin spike_origin = SpikeOrigin::given;
  Use use = Use::estimate;
  std::string repeats;             ///< label shared by sweeps with one injected current
  std::vector<Interval> analysed;  ///< sorted, disjoint: the window minus the exclusions

  double end_ms() const { return start_ms + step_ms * static_cast<double>(input.size()); }
  double duration_ms() const { return step_ms * static_cast<double>(input.size()); }
  bool has_voltage() const { return !voltage_mV.empty(); }
};

/// What the sheet says about uncompensated series resistance (adds R_s I to the potential).
struct SeriesResistance {
  bool fit = false;         ///< estimate it as a free parameter
  double value_MOhm = 0.0;  ///< subtracted when not fitted
};

/// A file that went into a result, for the provenance block.
struct InputFile {
  std::string path;    ///< as named by the user or the sheet
  std::string sha256;  ///< lower-case hexadecimal of the file's bytes
};

/// One cell.
struct Recording {
  std::string cell;               ///< free text
  std::string input_unit = "nA";  ///< "nA" when the input is a current
  bool input_is_current = true;   ///< false: a sound's envelope, light, ...
  SeriesResistance series_resistance;
  std::vector<Sweep> sweeps;
  std::string spike_detection;   ///< how spikes were found, in words; empty: all were given
  std::vector<InputFile> files;  ///< the sheet and every file it names

  /// True when every sweep that a fit may see carries the membrane potential.
  bool has_voltage() const;
  /// Spikes inside the analysed intervals of sweeps with this use.
  std::size_t spike_count(Use use) const;
};

}  // namespace softsill

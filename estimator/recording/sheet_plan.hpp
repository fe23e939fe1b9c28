#pragma once

// What a cell sheet says, before any recording is opened.

#include <optional>
#include <string>
#include <vector>

#include "softsill/recording.hpp"
#include "softsill/spike_detection.hpp"

namespace softsill {

struct SweepPlan {
  std::size_t line = 0;  ///< of its [[sweep]] in the sheet
  std::string name;
  std::string recording;  ///< as the sheet names it
  std::string spikes;     ///< empty: found in the potential
  Use use = Use::estimate;
  std::string repeats;
  std::optional<double> start_ms, end_ms, sampling_ms;
  std::vector<Interval> exclude;
};

struct SheetPlan {
  std::string cell;
  std::string input_unit;  ///< empty: a current
  SeriesResistance series_resistance;
  SpikeDetection detection;
  std::vector<SweepPlan> sweeps;
};

/// \param path is used in messages and for the default of `cell`
/// \throws Error with the line of whatever is wrong
SheetPlan parse_sheet(const std::string& text, const std::string& path);

}  // namespace softsill

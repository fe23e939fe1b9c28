#pragma once

/// \file sheet.hpp
/// Reading a cell: the sheet (TOML) and the recording files it names.
///
/// A complete sheet:
///
///     cell = "H07"                       # free text; default: the sheet's file name
///     series_resistance_MOhm = "fit"     # "fit", or a number; default 0
///     # input_unit = "dB"                # the driving signal is no current: column `input`
///
///     [detection]                        # spikes from the potential, where a sweep lists none
///     level_mV = -20                     # upward crossing of a level (default), or instead
///     # slope_mV_per_ms = 15             # of a rate of rise
///     dead_time_ms = 1
///
///     [[sweep]]
///     name = "s1"                        # unique; default "sweep 1", "sweep 2", ...
///     recording = "s1.csv"               # relative to the sheet; see below
///     spikes = "s1_spikes.csv"           # column spike_ms; default: found in the potential
///     use = "estimate"                   # default; or "predict": held out, no fit sees it
///     repeats = "frozen-1"               # label of sweeps that share one driving signal
///     start_ms = 500                     # window to analyse, on the recording's own clock;
///     end_ms = 60500                     #   default: all of it
///     exclude = [[3000, 3500]]           # stretches left out of the window
///     # sampling_ms = 0.05               # sampling interval, where the file does not tell
///
/// Recording files:
/// - CSV, plain or gzip'd: a header line of column names, any number of '#' comment lines. Columns
///   time_ms (or time_s, time_us) first; current_nA (or current_pA, current_A), or `input` when the
///   sheet gives input_unit; optionally voltage_mV (or voltage_V).
/// - NPY: little-endian float32 or float64, C or Fortran order, samples along the first axis,
///   columns time_ms, current_nA (or the input), optionally voltage_mV. With sampling_ms, one or
///   two columns are the current and the potential without a time.
///
/// Sampling must be uniform: no time may leave the straight line of the others by more than 2 % of
/// the sampling interval plus what rounding explains (the last written digit, 32-bit floats).

#include <optional>
#include <string>
#include <vector>

#include "softsill/recording.hpp"

namespace softsill {

struct ReadOptions {
  /// Sweeps with one `repeats` label whose driving signals differ are an error. False: read them
  /// all the same and leave the finding to check_quality.
  bool check_repeats = true;
};

/// Reads a cell sheet and everything it names.
/// \throws Error naming file and place: missing or unreadable files, unknown or misspelt keys,
/// words
///         and columns (with the nearest known one), non-uniform sampling, text or NaN where a
///         number belongs, spikes unsorted, doubled or outside the sweep, windows outside the
///         recording, held-out stretches that are also estimated from, differing repeats, or more
///         than 200 million samples in a sweep
Recording read_cell_sheet(const std::string& path, const ReadOptions& options = {});

/// One recording file without a sheet: name, start_ms, step_ms, input and voltage_mV are set.
/// \param input_unit  empty: the driving signal is a current
/// \param sampling_ms sampling interval, where the file does not tell
Sweep read_recording_file(const std::string& path, const std::string& input_unit = {},
                          std::optional<double> sampling_ms = {});

/// Spike times (ms, strictly increasing) of a CSV file with the column spike_ms, spike_s or
/// spike_us, or of a one-dimensional NPY file in ms. \throws Error naming the line: unsorted,
/// doubled, or outside [start_ms, end_ms)
std::vector<double> read_spike_file(const std::string& path, double start_ms, double end_ms);

/// Two sweeps that share a label but not their driving signal.
struct RepeatMismatch {
  std::string repeats;
  std::size_t first_sweep = 0, other_sweep = 0;  ///< indices into Recording::sweeps
  /// Time since the start of the sweeps at which they first differ; empty when the lengths or the
  /// sampling intervals differ.
  std::optional<double> differs_at_ms;
  std::string sentence;  ///< names both sweeps and the difference
};

/// Compares each sweep with the first of its label, sample by sample. Differences up to 1/1000 of
/// the first sweep's standard deviation (rounding in files) do not count.
std::vector<RepeatMismatch> find_repeat_mismatches(const Recording& recording);

}  // namespace softsill

#pragma once

// The one door between file formats and sweeps: a reader turns a file into sampled signals. A new
// format is one more reader; nothing else of the program changes.

#include <optional>
#include <string>
#include <vector>

#include "estimator/recording/byte_source.hpp"

namespace softsill {

/// What a sheet says about a recording file.
struct SignalRequest {
  std::string path;
  std::string input_unit;             ///< empty: the driving signal is a current
  std::optional<double> sampling_ms;  ///< sampling interval, where the file does not tell
};

/// The uniformly sampled signals of one sweep.
struct SampledSignals {
  double start_ms = 0.0;
  double step_ms = 0.0;
  std::vector<double> input;       ///< nA, or the request's unit
  std::vector<double> voltage_mV;  ///< empty or as long as input
};

class SignalReader {
 public:
  virtual ~SignalReader() = default;
  /// Whether the content that starts like this is this reader's format.
  virtual bool recognises(const ByteSource& source) const = 0;
  /// All sweeps of the file, in its own order.
  /// \throws Error on anything that is not what the format promises
  virtual std::vector<SampledSignals> read(ByteSource& source,
                                           const SignalRequest& request) const = 0;
};

/// Text tables: columns time_ms, current_nA or input, optionally voltage_mV.
const SignalReader& csv_signal_reader();
/// NPY arrays with the same columns in that order.
const SignalReader& npy_signal_reader();

/// Sweeps of a file by whichever reader recognises it, and the file's SHA-256.
struct ReadSignals {
  std::vector<SampledSignals> sweeps;
  std::string sha256;
};
ReadSignals read_signals(const SignalRequest& request);

/// Spike times of a CSV (column spike_ms, spike_s or spike_us) or one-dimensional NPY file (ms).
struct ReadSpikes {
  std::vector<double> times_ms;
  std::string sha256;
};
/// \param start_ms, end_ms the sweep the spikes belong to
/// \throws Error naming line or element: unsorted, doubled, or outside [start_ms, end_ms)
ReadSpikes read_spikes(const std::string& path, double start_ms, double end_ms);

/// One-dimensional little-endian f4 or f8 array of any format version 1.0 to 3.0.
std::vector<double> read_npy_vector(ByteSource& source);
bool looks_like_npy(const ByteSource& source);

/// Longest sweep that is read: over an hour at 50 kHz.
constexpr std::size_t most_samples = 200'000'000;

/// A column's unit by the suffix of its name: value * times / over is in ms, nA or mV.
struct ColumnUnit {
  std::string name;
  double times = 1.0;
  double over = 1.0;
};

}  // namespace softsill

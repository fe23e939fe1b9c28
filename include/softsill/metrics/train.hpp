#pragma once

/// \file train.hpp
/// Spike trains as plain numbers, and the window they were observed in.
///
/// A train is a sorted run of spike times in ms without doubles, inside [begin_ms, end_ms). Every
/// public function of metrics/ checks that and throws Error when it is not so; nothing is sorted
/// or dropped silently.

#include <cstddef>
#include <span>
#include <string>
#include <vector>

namespace softsill::metrics {

/// Spike times, ms.
using Train = std::span<const double>;

/// The stretch of time a train was observed in: [begin_ms, end_ms).
struct Window {
  double begin_ms = 0.0;
  double end_ms = 0.0;

  double length_ms() const { return end_ms - begin_ms; }
  bool operator==(const Window&) const = default;
};

/// Repeats of one condition, all observed in the same window.
struct TrialSet {
  std::vector<std::vector<double>> trains_ms;
  Window window;

  std::size_t size() const { return trains_ms.size(); }
  std::size_t spike_count() const;
  /// Spikes per second and trial; 0 without trials.
  double mean_rate_hz() const;
};

/// \throws Error unless the window is finite and longer than 0
void check_window(const Window& window);
/// \param name  what the train is called in the message, such as "trial 3 of the cell"
/// \throws Error on times that are not finite, unsorted, doubled, or outside the window
void check_train(Train train, const Window& window, const std::string& name);
/// \throws Error naming the trial
void check_trials(const TrialSet& set, const std::string& name);

}  // namespace softsill::metrics

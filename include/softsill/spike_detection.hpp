#pragma once

/// \file spike_detection.hpp
/// Spike times from a recorded membrane potential.

#include <span>
#include <string>
#include <vector>

namespace softsill {

/// What counts as a spike. Times move by some tenths of a millisecond with the choice, and the
/// shortest intervals with them, so the choice is always printed with the count.
struct SpikeDetection {
  enum class By {
    level,  ///< the potential crosses level_mV upwards
    slope   ///< its rate of rise crosses slope_mV_per_ms upwards
  };
  By by = By::level;
  /// Halfway up a spike of usual size: above what synaptic or injected noise reaches, below the
  /// peak of the smallest spikes worth the name.
  double level_mV = -20.0;
  double slope_mV_per_ms = 15.0;
  /// Crossings this soon after a spike are not spikes. 1 ms is less than the shortest intervals
  /// that neurons produce, so that no real spike is lost and the absolute refractory time, which is
  /// estimated from the shortest intervals, is not made up here.
  double dead_time_ms = 1.0;
};

/// Times of upward crossings, interpolated linearly between samples.
///
/// After a crossing the potential must first fall 2 mV below the level (the slope under half its
/// criterion) before it can cross again: noise on a falling flank makes no second spike, however
/// broad the spike. A sweep that begins above the level has its first crossing outside: not a
/// spike.
///
/// The slope is the difference over 0.1 ms (or one sample, if that is longer), taken to hold at the
/// middle of that stretch.
///
/// \param voltage_mV finite samples, sample i at start_ms + i * step_ms
/// \returns strictly increasing times, ms
/// \throws Error on a step or dead time that is not positive (dead time may be 0), or on a
/// criterion
///         that is not finite (the slope must be positive)
std::vector<double> detect_spikes(std::span<const double> voltage_mV, double start_ms,
                                  double step_ms, const SpikeDetection& detection = {});

/// "upward crossing of -20 mV, dead time 1 ms"
std::string to_string(const SpikeDetection& detection);

}  // namespace softsill

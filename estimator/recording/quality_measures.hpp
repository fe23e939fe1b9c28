#pragma once

// The numbers of the quality check, without any judgement.

#include <cstddef>
#include <span>
#include <vector>

#include "estimator/recording/statistics.hpp"
#include "softsill/quality.hpp"

namespace softsill {

/// Sample ranges of the analysed intervals; empty ones left out.
std::vector<SampleRange> analysed_samples(const Sweep& sweep);
double analysed_ms(const Sweep& sweep);
/// Spikes inside an interval.
std::span<const double> spikes_within(const Sweep& sweep, const Interval& interval);
/// Intervals between successive spikes of one analysed stretch, ms.
std::vector<double> spike_intervals(const Sweep& sweep);
/// Standard deviation (n) over mean; empty with fewer than two intervals.
std::optional<double> coefficient_of_variation(std::span<const double> intervals);

InputQuality measure_input(const Sweep& sweep);
/// Sweep must have a potential.
VoltageQuality measure_voltage(const Sweep& sweep);
/// \param known measures of the driving signal, where an equal one was measured before
SweepQuality measure_sweep(const Sweep& sweep, const InputQuality* known = nullptr);

/// True when all analysed samples of the driving signal are equal up to rounding.
bool constant_input(const InputQuality& input);

/// Empty with fewer than 6 blocks or, for the rate, fewer than 5 spikes per block.
std::optional<Drift> measure_rate_drift(const Recording& recording);
/// Empty with fewer than 6 blocks that have a potential away from spikes.
std::optional<Drift> measure_resting_drift(const Recording& recording);

}  // namespace softsill

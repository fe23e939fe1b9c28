#include "softsill/spike_detection.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>

#include "softsill/error.hpp"

namespace softsill {

namespace {

constexpr double rearm_mV = 2.0;
constexpr double rearm_slope_share = 0.5;
constexpr double slope_span_ms = 0.1;

/// Upward crossings of `criterion` by signal(0), signal(1), ...; signal(i) holds at
/// first_ms + i * step_ms.
template <typename Signal>
std::vector<double> crossings(const Signal& signal, std::size_t count, double first_ms,
                              double step_ms, double criterion, double rearm, double dead_time_ms) {
  std::vector<double> times;
  if (count == 0) {
    return times;
  }
  double before = signal(0);
  bool armed = before < criterion;
  for (std::size_t i = 1; i < count; ++i) {
    const double now = signal(i);
    if (armed && now >= criterion) {
      armed = false;
      // Armed below the criterion, so before < criterion <= now and the share is in (0, 1].
      const double share = (criterion - before) / (now - before);
      const double time = first_ms + step_ms * (static_cast<double>(i - 1) + share);
      if (times.empty() || (time - times.back() >= dead_time_ms && time > times.back())) {
        times.push_back(time);
      }
    } else if (!armed && now < rearm) {
      armed = true;
    }
    before = now;
  }
  return times;
}

}  // namespace

std::vector<double> detect_spikes(std::span<const double> voltage_mV, double start_ms,
                                  double step_ms, const SpikeDetection& detection) {
  if (!(step_ms > 0.0) || !std::isfinite(step_ms)) {
    throw Error("", "spike detection", "the sampling interval is not positive");
  }
  if (!(detection.dead_time_ms >= 0.0) || !std::isfinite(detection.dead_time_ms)) {
    throw Error("", "spike detection", "the dead time is negative or not finite");
  }
  if (detection.by == SpikeDetection::By::level) {
    if (!std::isfinite(detection.level_mV)) {
      throw Error("", "spike detection", "the level is not finite");
    }
    return crossings([&](std::size_t i) { return voltage_mV[i]; }, voltage_mV.size(), start_ms,
                     step_ms, detection.level_mV, detection.level_mV - rearm_mV,
                     detection.dead_time_ms);
  }
  if (!(detection.slope_mV_per_ms > 0.0) || !std::isfinite(detection.slope_mV_per_ms)) {
    throw Error("", "spike detection", "the slope is not positive");
  }
  const auto span =
      std::max<std::size_t>(1, static_cast<std::size_t>(std::lround(slope_span_ms / step_ms)));
  if (voltage_mV.size() <= span) {
    return {};
  }
  const double span_ms = step_ms * static_cast<double>(span);
  return crossings([&](std::size_t i) { return (voltage_mV[i + span] - voltage_mV[i]) / span_ms; },
                   voltage_mV.size() - span, start_ms + 0.5 * span_ms, step_ms,
                   detection.slope_mV_per_ms, rearm_slope_share * detection.slope_mV_per_ms,
                   detection.dead_time_ms);
}

std::string to_string(const SpikeDetection& detection) {
  char text[120];
  if (detection.by == SpikeDetection::By::level) {
    std::snprintf(text, sizeof text, "upward crossing of %g mV, dead time %g ms",
                  detection.level_mV, detection.dead_time_ms);
  } else {
    std::snprintf(text, sizeof text, "rate of rise crossing %g mV/ms, dead time %g ms",
                  detection.slope_mV_per_ms, detection.dead_time_ms);
  }
  return text;
}

}  // namespace softsill

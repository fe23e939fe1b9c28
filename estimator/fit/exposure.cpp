#include "estimator/fit/exposure.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <string>

#include "softsill/error.hpp"

namespace softsill {
namespace {

double before_value_of(const Sweep& sweep, const FitOptions& options) {
  if (!options.before || *options.before == Before::first_value) {
    return sweep.input.empty() ? 0.0 : sweep.input.front();
  }
  return *options.before == Before::holding ? options.holding : 0.0;
}

/// [begin, end) without the refractory times after the spikes.
void add_at_risk(const Interval& window, const std::vector<double>& spikes, double refractory_ms,
                 std::vector<Interval>& out) {
  double from = window.begin_ms;
  const auto first =
      std::lower_bound(spikes.begin(), spikes.end(), window.begin_ms - refractory_ms);
  for (auto spike = first; spike != spikes.end() && *spike < window.end_ms; ++spike) {
    if (*spike > from) {
      out.push_back({from, *spike});
    }
    from = std::max(from, *spike + refractory_ms);
  }
  if (from < window.end_ms) {
    out.push_back({from, window.end_ms});
  }
}

}  // namespace

Exposure make_exposure(const Recording& recording, const RefractoryPlan& refractory,
                       double lead_in_ms, const FitOptions& options) {
  Exposure exposure;
  exposure.shortest_interval_ms = std::numeric_limits<double>::infinity();
  for (const Sweep& sweep : recording.sweeps) {
    if (sweep.use == Use::estimate) {
      for (std::size_t i = 1; i < sweep.spikes_ms.size(); ++i) {
        exposure.shortest_interval_ms =
            std::min(exposure.shortest_interval_ms, sweep.spikes_ms[i] - sweep.spikes_ms[i - 1]);
      }
    }
  }
  exposure.refractory_estimated = !refractory.given_ms.has_value();
  if (refractory.given_ms) {
    exposure.refractory_ms = *refractory.given_ms;
    if (exposure.refractory_ms > exposure.shortest_interval_ms) {
      throw Error("", "refractory time",
                  "the given " + std::to_string(exposure.refractory_ms) +
                      " ms is longer than the shortest interval between spikes, " +
                      std::to_string(exposure.shortest_interval_ms) + " ms",
                  "give a shorter one, or remove doubled spikes");
    }
  } else {
    // The maximum-likelihood dead time is the shortest interval; without short intervals in the
    // data it would only say that the cell fires slowly, hence the cap.
    exposure.refractory_ms = std::min(exposure.shortest_interval_ms, refractory.cap_ms);
  }
  // A spike exactly at the end of the dead time must stay possible under rounding.
  exposure.refractory_ms *= 1.0 - 1e-9;

  const double lead_in = options.before ? 0.0 : lead_in_ms;
  for (const Sweep& sweep : recording.sweeps) {
    if (sweep.use != Use::estimate) {
      continue;
    }
    SweepExposure part;
    part.sweep = &sweep;
    part.before_value = before_value_of(sweep, options);
    const double ready = sweep.start_ms + lead_in;
    for (const Interval& window : sweep.analysed) {
      const Interval used{std::max(window.begin_ms, ready), std::max(window.end_ms, ready)};
      exposure.left_out_ms += window.length_ms() - used.length_ms();
      exposure.analysed_ms += used.length_ms();
      add_at_risk(used, sweep.spikes_ms, exposure.refractory_ms, part.at_risk);
      for (double spike : sweep.spikes_ms) {
        if (spike >= used.begin_ms && spike < used.end_ms) {
          part.spikes_ms.push_back(spike);
        } else if (spike >= window.begin_ms && spike < window.end_ms) {
          ++exposure.left_out_spikes;
        }
      }
    }
    for (const Interval& stretch : part.at_risk) {
      exposure.at_risk_ms += stretch.length_ms();
    }
    exposure.spikes += part.spikes_ms.size();
    exposure.sweeps.push_back(std::move(part));
  }
  if (exposure.at_risk_ms <= 0.0) {
    throw Error("", "fit",
                "no time is left after leaving out the first " + std::to_string(lead_in) +
                    " ms of every sweep, whose past is unknown",
                "use shorter kernels in the variant, or say with --before what the input was "
                "before a sweep");
  }
  if (exposure.spikes < 2) {
    throw Error(
        "", "fit",
        "only " + std::to_string(exposure.spikes) + " spike(s) fall into the time used for the fit",
        "record longer, or say with --before what the input was before a sweep");
  }
  return exposure;
}

}  // namespace softsill

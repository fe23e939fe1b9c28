#include "estimator/recording/quality_findings.hpp"

#include <algorithm>
#include <cmath>
#include <map>

#include "estimator/recording/quality_measures.hpp"
#include "estimator/recording/say.hpp"
#include "softsill/sheet.hpp"
#include "softsill/spike_detection.hpp"

namespace softsill {

namespace {

constexpr std::size_t few_spikes = 100;
constexpr double coarse_step_ms = 0.2;
constexpr double slow_bandwidth_Hz = 20.0;
constexpr double short_sweep_ms = 400.0;
constexpr double drift_p = 0.01;
constexpr double rate_drift_share = 0.2;
constexpr double resting_drift_mV = 2.0;
constexpr std::size_t few_repeats = 4;
constexpr double still_ms = 20.0;

const char* const series_remedy =
    "look at the recording; leave bad stretches out with start_ms, end_ms or exclude in the sheet";

class Findings {
 public:
  explicit Findings(std::vector<Finding>& list) : list_(list) {}
  void fine(std::string sweep, std::string topic, std::string what) {
    list_.push_back({Grade::fine, std::move(sweep), std::move(topic), std::move(what), {}});
  }
  void look(std::string sweep, std::string topic, std::string what, std::string remedy) {
    list_.push_back(
        {Grade::look, std::move(sweep), std::move(topic), std::move(what), std::move(remedy)});
  }
  void stop(std::string sweep, std::string topic, std::string what, std::string remedy) {
    list_.push_back(
        {Grade::stop, std::move(sweep), std::move(topic), std::move(what), std::move(remedy)});
  }

 private:
  std::vector<Finding>& list_;
};

/// Longest stretch in which the potential does not move at all.
double longest_still_ms(const Sweep& sweep) {
  std::size_t longest = 0;
  for (const SampleRange& range : analysed_samples(sweep)) {
    std::size_t begin = range.begin;
    for (std::size_t i = range.begin + 1; i <= range.end; ++i) {
      if (i == range.end || sweep.voltage_mV[i] != sweep.voltage_mV[begin]) {
        longest = std::max(longest, i - begin);
        begin = i;
      }
    }
  }
  return static_cast<double>(longest) * sweep.step_ms;
}

/// Held values (steps, or noise refreshed more slowly than it was sampled) repeat themselves; their
/// extremes say nothing about clipping.
bool mostly_repeats_itself(const std::vector<double>& values) {
  std::size_t same = 0;
  for (std::size_t i = 1; i < values.size(); ++i) {
    same += values[i] == values[i - 1] ? 1 : 0;
  }
  return 2 * same > values.size();
}

void judge_input(const Sweep& sweep, const SweepQuality& quality, const Recording& recording,
                 bool all_constant, Findings& findings) {
  const char* const topic = "driving signal";
  const InputQuality& input = quality.input;
  if (constant_input(input)) {
    const std::string what = say("is constant (%.4g %s)", input.mean, recording.input_unit.c_str());
    if (sweep.use == Use::estimate && all_constant) {
      findings.stop(sweep.name, topic, what,
                    "kappa cannot be told from a constant: use sweeps with a fluctuating signal");
    } else {
      findings.look(sweep.name, topic, what, "it tells rate and adaptation, but nothing of kappa");
    }
    return;
  }
  if (input.bandwidth_Hz && *input.bandwidth_Hz < slow_bandwidth_Hz && sweep.use == Use::estimate) {
    findings.look(sweep.name, topic,
                  say("90 %% of its variance lies below %.3g Hz", *input.bandwidth_Hz),
                  "the early part of kappa will be uncertain: add power up to some 100 Hz");
  }
  if (recording.input_is_current && input.standard_deviation > 50.0) {
    findings.look(sweep.name, topic,
                  say("a standard deviation of %.4g nA is large for a current into one cell",
                      input.standard_deviation),
                  "if these are pA, name the column current_pA");
  }
  if (!mostly_repeats_itself(sweep.input) && !clipped_runs(sweep.input, sweep.step_ms).empty()) {
    findings.look(sweep.name, topic,
                  say("is clipped (lowest %.4g, highest %.4g %s)", input.minimum, input.maximum,
                      recording.input_unit.c_str()),
                  "harmless if the cell received it like this; else correct the recorded channel");
  }
}

void judge_voltage(const Sweep& sweep, const SweepQuality& quality, Findings& findings) {
  const char* const topic = "potential";
  const VoltageQuality& voltage = *quality.voltage;
  if (voltage.minimum_mV == voltage.maximum_mV) {
    findings.stop(sweep.name, topic, say("is constant (%.4g mV)", voltage.minimum_mV),
                  "the channel was not connected: leave the column out to fit spikes alone");
    return;
  }
  if (voltage.maximum_mV - voltage.minimum_mV < 0.5 && voltage.maximum_mV < 0.2) {
    findings.look(sweep.name, topic,
                  say("spans only %.3g to %.3g mV", voltage.minimum_mV, voltage.maximum_mV),
                  "if these are volts, name the column voltage_V");
  }
  if (voltage.clipped_subthreshold > 0) {
    findings.stop(sweep.name, topic,
                  say("is clipped between %.4g and %.4g mV, for %zu samples away from spikes",
                      voltage.minimum_mV, voltage.maximum_mV, voltage.clipped_subthreshold),
                  "leave those stretches out with exclude, or the column to fit spikes alone");
  } else if (voltage.clipped_samples > 0) {
    findings.fine(sweep.name, topic,
                  say("is cut during spikes only (%zu samples), where it is not used",
                      voltage.clipped_samples));
  }
  const double still = longest_still_ms(sweep);
  if (still >= still_ms) {
    findings.look(sweep.name, topic, say("does not move at all for %.4g ms", still), series_remedy);
  }
}

void judge_spikes(const Sweep& sweep, const SweepQuality& quality, std::size_t all_spikes,
                  Findings& findings) {
  const char* const topic = "spikes";
  if (quality.spikes == 0 && all_spikes > 0) {
    findings.look(
        sweep.name, topic, "the sweep holds none",
        quality.voltage && sweep.spike_origin == SpikeOrigin::detected
            ? say("the potential reaches %.4g mV: set level_mV under [detection] lower if "
                  "those are spikes",
                  quality.voltage->maximum_mV)
            : "a silent sweep is data too; check that this one was");
  }
  if (quality.intervals_under_2ms > 0) {
    findings.look(sweep.name, topic,
                  say("%zu %s under 2 ms, the shortest %.3g ms", quality.intervals_under_2ms,
                      quality.intervals_under_2ms == 1 ? "interval is" : "intervals are",
                      *quality.shortest_interval_ms),
                  "rule out spikes counted twice (dead_time_ms under [detection]); they set the "
                  "refractory time");
  }
  if (sweep.spike_origin == SpikeOrigin::given && sweep.has_voltage() && quality.spikes >= 5) {
    const std::vector<double> seen = detect_spikes(sweep.voltage_mV, sweep.start_ms, sweep.step_ms);
    if (seen.size() >= 5) {
      std::size_t matched = 0;
      for (const double spike : sweep.spikes_ms) {
        const auto after = std::lower_bound(seen.begin(), seen.end(), spike);
        matched += (after != seen.end() && *after - spike < 3.0) ||
                           (after != seen.begin() && spike - *std::prev(after) < 3.0)
                       ? 1
                       : 0;
      }
      const double share =
          static_cast<double>(matched) / static_cast<double>(sweep.spikes_ms.size());
      if (share < 0.8) {
        findings.look(sweep.name, topic,
                      say("only %.0f %% of the listed spikes lie within 3 ms of an upward crossing "
                          "of -20 mV",
                          100.0 * share),
                      "check that both files share one clock and belong together");
      }
    }
  }
}

void judge_counts(const QualityReport& report, Findings& findings) {
  const bool detected = !report.spike_detection.empty();
  const std::string more = detected ? "check level_mV under [detection]" : "check the spike files";
  if (report.estimate_ms <= 0.0) {
    findings.stop("", "sweeps", "no sweep is there to estimate from",
                  "give at least one sweep use = \"estimate\"");
    return;
  }
  if (report.estimate_spikes < 2) {
    findings.stop("", "spikes",
                  report.estimate_spikes == 0 ? "there are none to estimate from"
                                              : "there is only one to estimate from",
                  more + ", or record longer");
  } else if (report.estimate_spikes < few_spikes) {
    findings.look("", "spikes", say("only %zu to estimate from", report.estimate_spikes),
                  "expect wide intervals; 300 or more tell kernels well");
  } else {
    findings.fine("", "spikes", say("%zu to estimate from", report.estimate_spikes));
  }
  if (report.predict_ms <= 0.0) {
    findings.look(
        "", "sweeps", "none is held out (use = \"predict\")",
        "hold one out, or a window of one: prediction cannot be scored on what was fitted");
  }
}

void judge_mixture(const Recording& recording, Findings& findings) {
  std::size_t with = 0;
  std::size_t all = 0;
  for (const Sweep& sweep : recording.sweeps) {
    if (sweep.use == Use::estimate) {
      ++all;
      with += sweep.has_voltage() ? 1 : 0;
    }
  }
  if (with > 0 && with < all) {
    findings.look(
        "", "potential",
        say("only %zu of %zu sweeps to estimate from carry it, so a fit uses spikes alone", with,
            all),
        "estimate from the sweeps that carry it to get everything in mV");
  }
}

void judge_repeats(const Recording& recording, Findings& findings) {
  std::map<std::string, std::size_t> counts;
  for (const Sweep& sweep : recording.sweeps) {
    if (!sweep.repeats.empty()) {
      ++counts[sweep.repeats];
    }
  }
  for (const RepeatMismatch& mismatch : find_repeat_mismatches(recording)) {
    findings.stop(recording.sweeps[mismatch.other_sweep].name, "repeats", mismatch.sentence,
                  "correct the label repeats in the sheet");
  }
  if (counts.empty()) {
    findings.look("", "repeats", "there are none",
                  "without repeats of one signal, prediction has no reliability to compare with");
  }
  for (const auto& [label, count] : counts) {
    if (count < few_repeats) {
      findings.look("", "repeats", say("'%s' has only %zu", label.c_str(), count),
                    say("reliability with an interval takes %zu or more", few_repeats));
    } else {
      findings.fine("", "repeats", say("'%s' has %zu", label.c_str(), count));
    }
  }
}

void judge_drifts(const QualityReport& report, Findings& findings) {
  if (report.rate_drift) {
    const Drift& drift = *report.rate_drift;
    const double total_s = (report.estimate_ms + report.predict_ms) / 1e3;
    const double mean =
        static_cast<double>(report.estimate_spikes + report.predict_spikes) / total_s;
    const std::string numbers = say("%+.3g Hz per minute over %zu blocks (p = %.2g)",
                                    drift.change_per_min, drift.blocks, drift.p_value);
    if (drift.p_value < drift_p && std::abs(drift.total_change) > rate_drift_share * mean) {
      findings.look("", "drift", "the firing rate drifts: " + numbers,
                    "expected if the sweeps differ in strength; else leave the unstable part out");
    } else {
      findings.fine("", "drift", "firing rate: " + numbers);
    }
  }
  if (report.resting_drift) {
    const Drift& drift = *report.resting_drift;
    const std::string numbers = say("%+.3g mV per minute over %zu blocks (p = %.2g)",
                                    drift.change_per_min, drift.blocks, drift.p_value);
    if (drift.p_value < drift_p && std::abs(drift.total_change) > resting_drift_mV) {
      findings.look("", "drift", "the potential between spikes drifts: " + numbers,
                    "expected if the sweeps differ in mean; else leave the unstable part out");
    } else {
      findings.fine("", "drift", "potential between spikes: " + numbers);
    }
  }
}

void judge_sampling(const QualityReport& report, Findings& findings) {
  double finest = 0.0;
  double coarsest = 0.0;
  for (const SweepQuality& sweep : report.sweeps) {
    finest = finest == 0.0 ? sweep.step_ms : std::min(finest, sweep.step_ms);
    coarsest = std::max(coarsest, sweep.step_ms);
    if (sweep.analysed_ms < short_sweep_ms && sweep.use == Use::estimate) {
      findings.look(sweep.name, "sweeps", say("only %.4g ms are analysed", sweep.analysed_ms),
                    "the first part is left out while its past is unknown; tell what came before, "
                    "or use longer sweeps");
    }
  }
  const std::string rate = finest == coarsest
                               ? say("every %.4g ms (%.4g kHz)", finest, 1.0 / finest)
                               : say("every %.4g to %.4g ms", finest, coarsest);
  if (coarsest > coarse_step_ms) {
    findings.look("", "sampling", rate,
                  "kernels are blurred by the sampling interval; 10 kHz or more is better");
  } else {
    findings.fine("", "sampling", rate);
  }
}

}  // namespace

std::vector<Finding> judge_quality(const Recording& recording, const QualityReport& report) {
  std::vector<Finding> list;
  Findings findings(list);
  judge_counts(report, findings);
  judge_sampling(report, findings);
  judge_mixture(recording, findings);
  const bool all_constant =
      std::all_of(report.sweeps.begin(), report.sweeps.end(), [](const SweepQuality& sweep) {
        return sweep.use != Use::estimate || constant_input(sweep.input);
      });
  for (std::size_t i = 0; i < recording.sweeps.size(); ++i) {
    const Sweep& sweep = recording.sweeps[i];
    judge_input(sweep, report.sweeps[i], recording, all_constant, findings);
    if (sweep.has_voltage()) {
      judge_voltage(sweep, report.sweeps[i], findings);
    }
    judge_spikes(sweep, report.sweeps[i], report.estimate_spikes + report.predict_spikes, findings);
  }
  judge_repeats(recording, findings);
  judge_drifts(report, findings);
  return list;
}

}  // namespace softsill

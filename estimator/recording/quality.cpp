#include "softsill/quality.hpp"

#include <algorithm>
#include <map>

#include "estimator/recording/quality_findings.hpp"
#include "estimator/recording/quality_measures.hpp"
#include "estimator/recording/say.hpp"
#include "softsill/error.hpp"

namespace softsill {

namespace {

/// True when both sweeps have one driving signal, to the last bit and in the same windows.
bool same_input(const Sweep& a, const Sweep& b) {
  return a.step_ms == b.step_ms && a.start_ms == b.start_ms && a.input == b.input &&
         std::equal(a.analysed.begin(), a.analysed.end(), b.analysed.begin(), b.analysed.end(),
                    [](const Interval& x, const Interval& y) {
                      return x.begin_ms == y.begin_ms && x.end_ms == y.end_ms;
                    });
}

std::string sentence_for(Identifiability identifiability, bool input_is_current) {
  const std::string signal = input_is_current ? "Current" : "Driving signal";
  switch (identifiability) {
    case Identifiability::spikes_and_voltage:
      return signal +
             " with spikes and potential: kappa, eta, theta_1, E_0, theta_0 and Delta can "
             "all be estimated, in mV.";
    case Identifiability::spikes_anchored:
      return signal +
             " with spikes and an anchor: kappa, eta - theta_1, E_0 - theta_0 and Delta in "
             "mV, as good as the anchor, whose uncertainty is carried along; eta and "
             "theta_1 cannot be told apart.";
    case Identifiability::spikes_alone:
      break;
  }
  return signal +
         " with spikes alone: kappa / Delta, (eta - theta_1) / Delta and (E_0 - theta_0) / "
         "Delta can be estimated. Delta in mV cannot, nor eta apart from theta_1; an anchor "
         "(input resistance, or Delta in mV) would set the scale.";
}

}  // namespace

std::string_view to_string(Grade grade) {
  switch (grade) {
    case Grade::fine:
      return "fine";
    case Grade::look:
      return "look";
    case Grade::stop:
      return "stop";
  }
  return "";
}

std::string_view to_string(Identifiability identifiability) {
  switch (identifiability) {
    case Identifiability::spikes_alone:
      return "spikes_alone";
    case Identifiability::spikes_anchored:
      return "spikes_anchored";
    case Identifiability::spikes_and_voltage:
      return "spikes_and_voltage";
  }
  return "";
}

Grade QualityReport::worst() const {
  Grade worst = Grade::fine;
  for (const Finding& finding : findings) {
    worst = std::max(worst, finding.grade);
  }
  return worst;
}

QualityReport check_quality(const Recording& recording, bool anchored) {
  QualityReport report;
  report.cell = recording.cell;
  report.input_unit = recording.input_unit;
  report.input_is_current = recording.input_is_current;
  report.spike_detection = recording.spike_detection;
  std::vector<double> intervals;
  std::map<std::string, std::size_t> first_of;
  for (std::size_t i = 0; i < recording.sweeps.size(); ++i) {
    const Sweep& sweep = recording.sweeps[i];
    const InputQuality* known = nullptr;
    if (!sweep.repeats.empty()) {
      const std::size_t first = first_of.emplace(sweep.repeats, i).first->second;
      if (first < i && same_input(recording.sweeps[first], sweep)) {
        known = &report.sweeps[first].input;
      }
    }
    const SweepQuality quality = measure_sweep(sweep, known);
    (sweep.use == Use::estimate ? report.estimate_ms : report.predict_ms) += quality.analysed_ms;
    (sweep.use == Use::estimate ? report.estimate_spikes : report.predict_spikes) += quality.spikes;
    report.intervals_under_2ms += quality.intervals_under_2ms;
    const std::vector<double> own = spike_intervals(sweep);
    intervals.insert(intervals.end(), own.begin(), own.end());
    report.sweeps.push_back(quality);
  }
  report.interval_cv = coefficient_of_variation(intervals);
  report.rate_drift = measure_rate_drift(recording);
  report.resting_drift = measure_resting_drift(recording);
  report.identifiability = recording.has_voltage() ? Identifiability::spikes_and_voltage
                           : anchored              ? Identifiability::spikes_anchored
                                                   : Identifiability::spikes_alone;
  report.identifiability_sentence =
      sentence_for(report.identifiability, recording.input_is_current);

  report.findings = judge_quality(recording, report);
  std::stable_sort(report.findings.begin(), report.findings.end(),
                   [](const Finding& a, const Finding& b) { return a.grade > b.grade; });
  return report;
}

void require_fittable(const Recording& recording, bool with_voltage) {
  const std::string file = recording.files.empty() ? std::string() : recording.files.front().path;
  const bool any = std::any_of(recording.sweeps.begin(), recording.sweeps.end(),
                               [](const Sweep& sweep) { return sweep.use == Use::estimate; });
  if (!any) {
    throw Error(file, "", "no sweep is there to estimate from",
                "give at least one sweep use = \"estimate\"");
  }
  const std::size_t spikes = recording.spike_count(Use::estimate);
  if (spikes < 2) {
    throw Error(file, "",
                spikes == 0 ? "there are no spikes in the sweeps to estimate from"
                            : "there is only one spike in the sweeps to estimate from",
                recording.spike_detection.empty()
                    ? "check the spike files, or record longer"
                    : "spikes were sought by " + recording.spike_detection +
                          "; set level_mV under [detection], or record longer");
  }
  bool all_constant = true;
  for (const Sweep& sweep : recording.sweeps) {
    if (sweep.use != Use::estimate) {
      continue;
    }
    InputQuality input;
    bool first = true;
    for (const SampleRange& range : analysed_samples(sweep)) {
      const auto [low, high] =
          std::minmax_element(sweep.input.begin() + static_cast<std::ptrdiff_t>(range.begin),
                              sweep.input.begin() + static_cast<std::ptrdiff_t>(range.end));
      input.minimum = first ? *low : std::min(input.minimum, *low);
      input.maximum = first ? *high : std::max(input.maximum, *high);
      first = false;
    }
    all_constant = all_constant && constant_input(input);
    if (!with_voltage || !sweep.has_voltage()) {
      continue;
    }
    const VoltageQuality voltage = measure_voltage(sweep);
    const std::string place = "sweep '" + sweep.name + "'";
    if (voltage.minimum_mV == voltage.maximum_mV) {
      throw Error(file, place, "the potential is constant",
                  "the channel was not connected: leave the column out to fit spikes alone");
    }
    if (voltage.clipped_subthreshold > 0) {
      throw Error(
          file, place,
          say("the potential is clipped between %.4g and %.4g mV, for %zu samples away from "
              "spikes",
              voltage.minimum_mV, voltage.maximum_mV, voltage.clipped_subthreshold),
          "leave those stretches out with exclude in the sheet, or the column to fit spikes "
          "alone");
    }
  }
  if (all_constant) {
    throw Error(file, "", "the driving signal is constant in every sweep to estimate from",
                "kappa cannot be told from a constant: record with a fluctuating signal");
  }
}

}  // namespace softsill

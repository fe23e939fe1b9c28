#include "softsill/sheet.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <filesystem>
#include <map>

#include "estimator/recording/sheet_plan.hpp"
#include "estimator/recording/signal_reader.hpp"
#include "softsill/error.hpp"
#include "softsill/files.hpp"

namespace softsill {

namespace {

constexpr std::size_t largest_sheet_bytes = std::size_t{1} << 22;

std::string sheet_place(const SweepPlan& plan) {
  return "line " + std::to_string(plan.line) + ", sweep '" + plan.name + "'";
}

/// The window of the sweep less its exclusions.
std::vector<Interval> analysed_intervals(const SweepPlan& plan, const Sweep& sweep,
                                         const std::string& sheet) {
  char text[200];
  Interval window{sweep.start_ms, sweep.end_ms()};
  // One sample of grace: whether the last sample still holds after its time is a matter of taste.
  const double grace = sweep.step_ms;
  for (const auto& [key, value] :
       {std::pair{"start_ms", plan.start_ms}, std::pair{"end_ms", plan.end_ms}}) {
    if (value && !(*value >= sweep.start_ms - grace && *value <= sweep.end_ms() + grace)) {
      std::snprintf(text, sizeof text, "%s = %.10g lies outside the recording (%.10g to %.10g ms)",
                    key, *value, sweep.start_ms, sweep.end_ms());
      throw Error(sheet, sheet_place(plan), text, "windows are on the recording's own clock");
    }
  }
  window.begin_ms = std::max(window.begin_ms, plan.start_ms.value_or(window.begin_ms));
  window.end_ms = std::min(window.end_ms, plan.end_ms.value_or(window.end_ms));

  std::vector<Interval> cuts = plan.exclude;
  std::sort(cuts.begin(), cuts.end(),
            [](const Interval& a, const Interval& b) { return a.begin_ms < b.begin_ms; });
  std::vector<Interval> kept;
  double from = window.begin_ms;
  for (const Interval& cut : cuts) {
    if (cut.end_ms <= sweep.start_ms || cut.begin_ms >= sweep.end_ms()) {
      std::snprintf(text, sizeof text,
                    "exclude = [%.10g, %.10g] lies outside the recording (%.10g to %.10g ms)",
                    cut.begin_ms, cut.end_ms, sweep.start_ms, sweep.end_ms());
      throw Error(sheet, sheet_place(plan), text, "exclusions are on the recording's own clock");
    }
    if (cut.begin_ms > from && from < window.end_ms) {
      kept.push_back({from, std::min(cut.begin_ms, window.end_ms)});
    }
    from = std::max(from, cut.end_ms);
  }
  if (from < window.end_ms) {
    kept.push_back({from, window.end_ms});
  }
  if (kept.empty()) {
    throw Error(sheet, sheet_place(plan), "nothing is left to analyse",
                "widen the window or exclude less");
  }
  return kept;
}

/// A held-out stretch must not be seen by a fit through another sweep.
void refuse_leaks(const SheetPlan& plan, const Recording& recording, const std::string& sheet) {
  for (std::size_t i = 0; i < plan.sweeps.size(); ++i) {
    for (std::size_t j = 0; j < i; ++j) {
      const SweepPlan& a = plan.sweeps[i];
      const SweepPlan& b = plan.sweeps[j];
      if (a.use == b.use || a.recording != b.recording || a.spikes != b.spikes) {
        continue;
      }
      for (const Interval& x : recording.sweeps[i].analysed) {
        for (const Interval& y : recording.sweeps[j].analysed) {
          const double begin = std::max(x.begin_ms, y.begin_ms);
          const double end = std::min(x.end_ms, y.end_ms);
          if (begin < end) {
            char text[160];
            std::snprintf(text, sizeof text, "%.10g to %.10g ms of %s", begin, end,
                          a.recording.c_str());
            throw Error(sheet, sheet_place(a),
                        "estimates and predicts the same data as sweep '" + b.name + "': " + text,
                        "give the two sweeps windows that do not overlap");
          }
        }
      }
    }
  }
}

class SheetReading {
 public:
  SheetReading(std::string path, SheetPlan plan)
      : path_(std::move(path)),
        folder_(std::filesystem::path(path_).parent_path()),
        plan_(std::move(plan)) {}

  Recording read() {
    Recording recording;
    recording.cell = plan_.cell;
    recording.input_is_current = plan_.input_unit.empty();
    recording.input_unit = recording.input_is_current ? "nA" : plan_.input_unit;
    recording.series_resistance = plan_.series_resistance;
    recording.files.push_back({path_, sha256_of_file(path_)});
    recording.sweeps.reserve(plan_.sweeps.size());
    for (const SweepPlan& plan : plan_.sweeps) {
      recording.sweeps.push_back(read_sweep(plan, recording));
    }
    refuse_leaks(plan_, recording, path_);
    return recording;
  }

 private:
  std::string resolved(const std::string& name) const { return (folder_ / name).string(); }

  /// Samples of a file, read once however many sweeps name it.
  Sweep samples_of(const SweepPlan& plan, Recording& recording) {
    const auto known = first_sweep_of_.find(plan.recording);
    Sweep sweep;
    if (known != first_sweep_of_.end() &&
        plan_.sweeps[known->second].sampling_ms == plan.sampling_ms) {
      const Sweep& same = recording.sweeps[known->second];
      sweep.start_ms = same.start_ms;
      sweep.step_ms = same.step_ms;
      sweep.input = same.input;
      sweep.voltage_mV = same.voltage_mV;
      return sweep;
    }
    ReadSignals signals =
        read_signals({resolved(plan.recording), plan_.input_unit, plan.sampling_ms});
    if (signals.sweeps.size() != 1) {
      throw Error(path_, sheet_place(plan), "the file does not hold exactly one sweep");
    }
    SampledSignals& only = signals.sweeps.front();
    sweep.start_ms = only.start_ms;
    sweep.step_ms = only.step_ms;
    sweep.input = std::move(only.input);
    sweep.voltage_mV = std::move(only.voltage_mV);
    if (known == first_sweep_of_.end()) {
      recording.files.push_back({plan.recording, signals.sha256});
      first_sweep_of_[plan.recording] = recording.sweeps.size();
    }
    return sweep;
  }

  Sweep read_sweep(const SweepPlan& plan, Recording& recording) {
    Sweep sweep = samples_of(plan, recording);
    sweep.name = plan.name;
    sweep.use = plan.use;
    sweep.repeats = plan.repeats;
    if (!plan.spikes.empty()) {
      ReadSpikes spikes = read_spikes(resolved(plan.spikes), sweep.start_ms, sweep.end_ms());
      sweep.spikes_ms = std::move(spikes.times_ms);
      sweep.spike_origin = SpikeOrigin::given;
      if (std::none_of(recording.files.begin(), recording.files.end(),
                       [&](const InputFile& file) { return file.path == plan.spikes; })) {
        recording.files.push_back({plan.spikes, spikes.sha256});
      }
    } else if (sweep.has_voltage()) {
      sweep.spikes_ms =
          detect_spikes(sweep.voltage_mV, sweep.start_ms, sweep.step_ms, plan_.detection);
      sweep.spike_origin = SpikeOrigin::detected;
      recording.spike_detection = to_string(plan_.detection);
    } else {
      throw Error(path_, sheet_place(plan),
                  "has neither spikes nor a recorded potential to find them in",
                  "name a spike file with the key spikes, or add a voltage_mV column");
    }
    sweep.analysed = analysed_intervals(plan, sweep, path_);
    return sweep;
  }

  std::string path_;
  std::filesystem::path folder_;
  SheetPlan plan_;
  std::map<std::string, std::size_t> first_sweep_of_;
};

double standard_deviation(const std::vector<double>& values) {
  double mean = 0.0;
  for (const double value : values) {
    mean += value;
  }
  mean /= static_cast<double>(values.size());
  double sum = 0.0;
  for (const double value : values) {
    sum += (value - mean) * (value - mean);
  }
  return std::sqrt(sum / static_cast<double>(values.size()));
}

std::optional<RepeatMismatch> compare(const Recording& recording, std::size_t first,
                                      std::size_t other) {
  const Sweep& a = recording.sweeps[first];
  const Sweep& b = recording.sweeps[other];
  RepeatMismatch mismatch{a.repeats, first, other, {}, {}};
  const std::string names = "sweeps '" + a.name + "' and '" + b.name +
                            "' are marked as repeats ('" + a.repeats + "') but ";
  char text[200];
  if (std::abs(a.step_ms - b.step_ms) > 1e-6 * a.step_ms) {
    std::snprintf(text, sizeof text, "are sampled every %.6g and %.6g ms", a.step_ms, b.step_ms);
    mismatch.sentence = names + text;
    return mismatch;
  }
  const double allowed = 1e-3 * standard_deviation(a.input);
  const std::size_t common = std::min(a.input.size(), b.input.size());
  for (std::size_t i = 0; i < common; ++i) {
    if (std::abs(a.input[i] - b.input[i]) > allowed) {
      mismatch.differs_at_ms = static_cast<double>(i) * a.step_ms;
      std::snprintf(
          text, sizeof text,
          "their driving signals differ from %.6g ms after their start (%.6g and %.6g %s)",
          *mismatch.differs_at_ms, a.input[i], b.input[i], recording.input_unit.c_str());
      mismatch.sentence = names + text;
      return mismatch;
    }
  }
  if (a.input.size() != b.input.size()) {
    std::snprintf(text, sizeof text, "have different lengths (%zu and %zu samples)", a.input.size(),
                  b.input.size());
    mismatch.sentence = names + text;
    return mismatch;
  }
  return std::nullopt;
}

}  // namespace

std::vector<RepeatMismatch> find_repeat_mismatches(const Recording& recording) {
  std::vector<RepeatMismatch> mismatches;
  std::map<std::string, std::size_t> first_of;
  for (std::size_t i = 0; i < recording.sweeps.size(); ++i) {
    const std::string& label = recording.sweeps[i].repeats;
    if (label.empty() || first_of.emplace(label, i).second) {
      continue;
    }
    if (auto mismatch = compare(recording, first_of[label], i)) {
      mismatches.push_back(std::move(*mismatch));
    }
  }
  return mismatches;
}

Recording read_cell_sheet(const std::string& path, const ReadOptions& options) {
  const std::string text = read_text_file(path, largest_sheet_bytes);
  if (text.empty()) {
    throw Error(path, "", "is empty", "check that it was written completely");
  }
  Recording recording;
  try {
    recording = SheetReading(path, parse_sheet(text, path)).read();
  } catch (const std::bad_alloc&) {
    throw Error(path, "", "the recordings do not fit into this computer's memory",
                "shorten them or analyse fewer sweeps at once");
  }
  if (options.check_repeats) {
    const std::vector<RepeatMismatch> mismatches = find_repeat_mismatches(recording);
    if (!mismatches.empty()) {
      throw Error(path, "", mismatches.front().sentence,
                  "correct the label in the sheet; `softsill check` lists every such pair");
    }
  }
  return recording;
}

Sweep read_recording_file(const std::string& path, const std::string& input_unit,
                          std::optional<double> sampling_ms) {
  if (sampling_ms && !(*sampling_ms > 0.0 && std::isfinite(*sampling_ms))) {
    throw Error(path, "", "the sampling interval is not positive");
  }
  ReadSignals signals = read_signals({path, input_unit, sampling_ms});
  Sweep sweep;
  sweep.name = std::filesystem::path(path).stem().string();
  sweep.start_ms = signals.sweeps.front().start_ms;
  sweep.step_ms = signals.sweeps.front().step_ms;
  sweep.input = std::move(signals.sweeps.front().input);
  sweep.voltage_mV = std::move(signals.sweeps.front().voltage_mV);
  sweep.analysed = {{sweep.start_ms, sweep.end_ms()}};
  return sweep;
}

std::vector<double> read_spike_file(const std::string& path, double start_ms, double end_ms) {
  return read_spikes(path, start_ms, end_ms).times_ms;
}

}  // namespace softsill

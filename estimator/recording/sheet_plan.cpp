#include "estimator/recording/sheet_plan.hpp"

#include <toml++/toml.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <initializer_list>
#include <set>

#include "estimator/recording/shown_text.hpp"
#include "softsill/error.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {

namespace {

std::string line_place(const toml::source_region& source) {
  return "line " + std::to_string(source.begin.line);
}

/// A table of the sheet with the file's name for messages.
class Section {
 public:
  Section(const toml::table& table, std::string path, std::string where)
      : table_(table), path_(std::move(path)), where_(std::move(where)) {}

  [[noreturn]] void refuse(const toml::node& node, const std::string& key, const std::string& what,
                           const std::string& remedy = {}) const {
    throw Error(path_, line_place(node.source()) + ", " + where_ + key, what, remedy);
  }

  void allow_only(std::initializer_list<std::string_view> known) const {
    for (const auto& [key, node] : table_) {
      if (std::find(known.begin(), known.end(), key.str()) == known.end()) {
        throw Error(path_, line_place(key.source()),
                    "unknown key '" + where_ + shown_text(key.str()) + "'",
                    "did you mean " + nearest_word(key.str(), known) + "?");
      }
    }
  }

  const toml::node* find(std::string_view key) const { return table_.get(key); }

  std::string text(const std::string& key) const {
    const toml::node* const node = find(key);
    if (node == nullptr) {
      return {};
    }
    if (!node->is_string()) {
      refuse(*node, key, "is not a text in quotes");
    }
    const std::string& value = node->as_string()->get();
    if (value.empty()) {
      refuse(*node, key, "is an empty text", "give it a value or leave the key out");
    }
    return value;
  }

  std::string required_text(const std::string& key) const {
    if (find(key) == nullptr) {
      throw Error(path_, line_place(table_.source()), "the key '" + where_ + key + "' is missing");
    }
    return text(key);
  }

  double number(const toml::node& node, const std::string& key) const {
    const std::optional<double> value = node.is_number() ? node.value<double>() : std::nullopt;
    if (!value || !std::isfinite(*value)) {
      refuse(node, key, "is not a finite number", "write a plain number without quotes or unit");
    }
    return *value;
  }

  std::optional<double> number(const std::string& key) const {
    const toml::node* const node = find(key);
    return node == nullptr ? std::nullopt : std::optional<double>(number(*node, key));
  }

 private:
  const toml::table& table_;
  std::string path_;
  std::string where_;
};

SpikeDetection parse_detection(const Section& section) {
  section.allow_only({"level_mV", "slope_mV_per_ms", "dead_time_ms"});
  SpikeDetection detection;
  if (const auto slope = section.number("slope_mV_per_ms")) {
    if (section.find("level_mV") != nullptr) {
      section.refuse(*section.find("slope_mV_per_ms"), "slope_mV_per_ms", "stands beside level_mV",
                     "choose one of the two criteria");
    }
    if (!(*slope > 0.0)) {
      section.refuse(*section.find("slope_mV_per_ms"), "slope_mV_per_ms", "is not positive");
    }
    detection.by = SpikeDetection::By::slope;
    detection.slope_mV_per_ms = *slope;
  }
  detection.level_mV = section.number("level_mV").value_or(detection.level_mV);
  if (const auto dead_time = section.number("dead_time_ms")) {
    if (*dead_time < 0.0) {
      section.refuse(*section.find("dead_time_ms"), "dead_time_ms", "is negative");
    }
    detection.dead_time_ms = *dead_time;
  }
  return detection;
}

std::vector<Interval> parse_exclusions(const Section& section) {
  std::vector<Interval> exclusions;
  const toml::node* const node = section.find("exclude");
  if (node == nullptr) {
    return exclusions;
  }
  const std::string remedy = "write pairs of times in ms, for example [[3000, 3500], [8000, 8200]]";
  if (!node->is_array()) {
    section.refuse(*node, "exclude", "is not a list", remedy);
  }
  for (const toml::node& item : *node->as_array()) {
    const toml::array* const pair = item.as_array();
    if (pair == nullptr || pair->size() != 2) {
      section.refuse(item, "exclude", "holds something else than a pair", remedy);
    }
    const Interval interval{section.number(*pair->get(0), "exclude"),
                            section.number(*pair->get(1), "exclude")};
    if (!(interval.begin_ms < interval.end_ms)) {
      section.refuse(item, "exclude", "holds a pair that does not go forwards in time", remedy);
    }
    exclusions.push_back(interval);
  }
  return exclusions;
}

SweepPlan parse_sweep(const toml::table& table, const std::string& path, std::size_t number) {
  const Section section(table, path, "sweep.");
  section.allow_only({"name", "recording", "spikes", "use", "repeats", "start_ms", "end_ms",
                      "exclude", "sampling_ms"});
  SweepPlan sweep;
  sweep.line = table.source().begin.line;
  sweep.name = section.text("name");
  if (sweep.name.empty()) {
    sweep.name = "sweep " + std::to_string(number);
  }
  sweep.recording = section.required_text("recording");
  sweep.spikes = section.text("spikes");
  sweep.repeats = section.text("repeats");
  const std::string use = section.text("use");
  if (use == "predict") {
    sweep.use = Use::predict;
  } else if (!use.empty() && use != "estimate") {
    const std::initializer_list<std::string_view> known = {"estimate", "predict"};
    section.refuse(*section.find("use"), "use", "unknown word '" + shown_text(use) + "'",
                   "did you mean " + nearest_word(use, known) +
                       "? A sweep is there to \"estimate\" from or to \"predict\"");
  }
  sweep.start_ms = section.number("start_ms");
  sweep.end_ms = section.number("end_ms");
  if (sweep.start_ms && sweep.end_ms && !(*sweep.start_ms < *sweep.end_ms)) {
    section.refuse(*section.find("end_ms"), "end_ms", "does not come after start_ms");
  }
  sweep.sampling_ms = section.number("sampling_ms");
  if (sweep.sampling_ms && !(*sweep.sampling_ms > 0.0)) {
    section.refuse(*section.find("sampling_ms"), "sampling_ms", "is not positive");
  }
  sweep.exclude = parse_exclusions(section);
  return sweep;
}

SeriesResistance parse_series_resistance(const Section& section) {
  const std::string key = "series_resistance_MOhm";
  SeriesResistance resistance;
  const toml::node* const node = section.find(key);
  if (node == nullptr) {
    return resistance;
  }
  if (node->is_string()) {
    if (node->as_string()->get() != "fit") {
      section.refuse(*node, key, "is neither a number nor \"fit\"");
    }
    resistance.fit = true;
    return resistance;
  }
  resistance.value_MOhm = section.number(*node, key);
  if (resistance.value_MOhm < 0.0) {
    section.refuse(*node, key, "is negative");
  }
  return resistance;
}

}  // namespace

SheetPlan parse_sheet(const std::string& text, const std::string& path) {
  toml::table table;
  try {
    table = toml::parse(text, path);
  } catch (const toml::parse_error& error) {
    throw Error(path, line_place(error.source()),
                "is not valid TOML: " + std::string(error.description()));
  }
  const Section top(table, path, "");
  top.allow_only({"cell", "series_resistance_MOhm", "input_unit", "detection", "sweep"});

  SheetPlan plan;
  plan.cell = top.text("cell");
  if (plan.cell.empty()) {
    plan.cell = std::filesystem::path(path).stem().string();
  }
  plan.input_unit = top.text("input_unit");
  plan.series_resistance = parse_series_resistance(top);
  if (!plan.input_unit.empty()) {
    const toml::node& node = *top.find("input_unit");
    for (const std::string_view current : {"nA", "pA", "A", "uA", "mA"}) {
      if (plan.input_unit == current) {
        top.refuse(node, "input_unit", "is the unit of a current",
                   "leave it out and name the column current_nA or current_pA");
      }
    }
    if (plan.series_resistance.fit || plan.series_resistance.value_MOhm != 0.0) {
      top.refuse(*top.find("series_resistance_MOhm"), "series_resistance_MOhm",
                 "has no meaning for a driving signal that is no current", "leave it out");
    }
  }
  if (const toml::node* const node = top.find("detection")) {
    if (!node->is_table()) {
      top.refuse(*node, "detection", "is not a table", "write [detection] on a line of its own");
    }
    plan.detection = parse_detection(Section(*node->as_table(), path, "detection."));
  }
  const toml::node* const sweeps = top.find("sweep");
  if (sweeps == nullptr) {
    throw Error(path, "", "names no sweeps", "add a [[sweep]] with the key recording");
  }
  if (!sweeps->is_array_of_tables()) {
    top.refuse(*sweeps, "sweep", "is not a list of tables", "head each sweep with [[sweep]]");
  }
  std::set<std::string> names;
  for (const toml::node& node : *sweeps->as_array()) {
    plan.sweeps.push_back(parse_sweep(*node.as_table(), path, plan.sweeps.size() + 1));
    if (!names.insert(plan.sweeps.back().name).second) {
      throw Error(path, line_place(node.source()),
                  "a second sweep is called '" + shown_text(plan.sweeps.back().name) + "'",
                  "give every sweep a name of its own");
    }
  }
  return plan;
}

}  // namespace softsill

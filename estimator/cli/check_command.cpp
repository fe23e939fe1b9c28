// softsill check: what was recorded and how good it is. The judgement is the library's; here it is
// only laid out.

#include <cctype>
#include <cstdio>
#include <memory>
#include <nlohmann/json.hpp>
#include <string>

#include "estimator/cli/command.hpp"
#include "estimator/cli/terminal.hpp"
#include "softsill/quality.hpp"
#include "softsill/sheet.hpp"

namespace softsill::cli {
namespace {

using Json = nlohmann::ordered_json;

std::string fixed(double value, int decimals) {
  char text[64];
  std::snprintf(text, sizeof text, "%.*f", decimals, value);
  return text;
}

std::string significant_or_dash(const std::optional<double>& value, int digits = 3) {
  return value ? significant(*value, digits) : "-";
}

const char* word_for(Use use) { return use == Use::estimate ? "estimate" : "predict"; }
const char* word_for(SpikeOrigin origin) {
  return origin == SpikeOrigin::given ? "given" : "detected";
}

Json optional_number(const std::optional<double>& value) {
  return value ? Json(*value) : Json(nullptr);
}

Json optional_text(const std::string& text) { return text.empty() ? Json(nullptr) : Json(text); }

Json drift_json(const std::optional<Drift>& drift, const char* unit) {
  if (!drift) {
    return nullptr;
  }
  return {{"change_per_min", drift->change_per_min},
          {"total_change", drift->total_change},
          {"unit", unit},
          {"p_value", drift->p_value},
          {"blocks", drift->blocks}};
}

Json sweep_json(const SweepQuality& sweep) {
  Json json = {{"name", sweep.name},
               {"use", word_for(sweep.use)},
               {"repeats", optional_text(sweep.repeats)},
               {"step_ms", sweep.step_ms},
               {"duration_ms", sweep.duration_ms},
               {"analysed_ms", sweep.analysed_ms}};
  json["input"] = {{"mean", sweep.input.mean},
                   {"standard_deviation", sweep.input.standard_deviation},
                   {"minimum", sweep.input.minimum},
                   {"maximum", sweep.input.maximum},
                   {"correlation_time_ms", optional_number(sweep.input.correlation_time_ms)},
                   {"bandwidth_Hz", optional_number(sweep.input.bandwidth_Hz)}};
  json["voltage"] = nullptr;
  if (sweep.voltage) {
    json["voltage"] = {
        {"minimum_mV", sweep.voltage->minimum_mV},
        {"maximum_mV", sweep.voltage->maximum_mV},
        {"median_subthreshold_mV", optional_number(sweep.voltage->median_subthreshold_mV)},
        {"clipped_samples", sweep.voltage->clipped_samples},
        {"clipped_subthreshold", sweep.voltage->clipped_subthreshold}};
  }
  json["spikes"] = {{"count", sweep.spikes},
                    {"origin", word_for(sweep.spike_origin)},
                    {"rate_Hz", sweep.rate_Hz},
                    {"interval_cv", optional_number(sweep.interval_cv)},
                    {"shortest_interval_ms", optional_number(sweep.shortest_interval_ms)},
                    {"intervals_under_2ms", sweep.intervals_under_2ms}};
  return json;
}

std::string report_json(const QualityReport& report, const Recording& recording) {
  Json json = {
      {"schema", "softsill-check"},
      {"schema_version", 1},
      {"cell", report.cell},
      {"input_unit", report.input_unit},
      {"input_is_current", report.input_is_current},
      {"spike_detection", optional_text(report.spike_detection)},
      {"worst", to_string(report.worst())},
      {"identifiability",
       {{"row", to_string(report.identifiability)}, {"sentence", report.identifiability_sentence}}},
      {"estimate", {{"analysed_ms", report.estimate_ms}, {"spikes", report.estimate_spikes}}},
      {"predict", {{"analysed_ms", report.predict_ms}, {"spikes", report.predict_spikes}}},
      {"interval_cv", optional_number(report.interval_cv)},
      {"intervals_under_2ms", report.intervals_under_2ms},
      {"rate_drift", drift_json(report.rate_drift, "Hz")},
      {"resting_drift", drift_json(report.resting_drift, "mV")}};
  json["sweeps"] = Json::array();
  for (const SweepQuality& sweep : report.sweeps) {
    json["sweeps"].push_back(sweep_json(sweep));
  }
  json["findings"] = Json::array();
  for (const Finding& finding : report.findings) {
    json["findings"].push_back({{"grade", to_string(finding.grade)},
                                {"sweep", optional_text(finding.sweep)},
                                {"topic", finding.topic},
                                {"what", finding.what},
                                {"remedy", optional_text(finding.remedy)}});
  }
  json["inputs"] = Json::array();
  for (const InputFile& file : recording.files) {
    json["inputs"].push_back({{"path", file.path}, {"sha256", file.sha256}});
  }
  // Paths may hold bytes that are not UTF-8; a result with a replaced letter beats none.
  return json.dump(2, ' ', false, Json::error_handler_t::replace) + '\n';
}

/// A name that would push the table off the page, cut in the middle: both ends tell sweeps apart.
std::string short_name(const std::string& name) {
  constexpr std::size_t longest = 20;
  if (width_of(name) <= longest) {
    return name;
  }
  const auto inside_letter = [&](std::size_t i) {
    return (static_cast<unsigned char>(name[i]) & 0xC0U) == 0x80U;
  };
  std::size_t head = 8;
  std::size_t tail = name.size() - 9;
  while (inside_letter(head)) {
    --head;
  }
  while (tail < name.size() && inside_letter(tail)) {
    ++tail;
  }
  return name.substr(0, head) + "..." + name.substr(tail);
}

std::string report_text(const QualityReport& report) {
  double recorded_ms = 0.0;
  for (const SweepQuality& sweep : report.sweeps) {
    recorded_ms += sweep.duration_ms;
  }
  const std::size_t count = report.sweeps.size();
  std::string text = "Cell " + report.cell + '\n';
  text += "  recorded          " + fixed(recorded_ms / 1e3, 1) + " s in " + std::to_string(count) +
          (count == 1 ? " sweep\n" : " sweeps\n");
  text += "  to estimate from  " + fixed(report.estimate_ms / 1e3, 1) + " s, " +
          std::to_string(report.estimate_spikes) + " spikes\n";
  text += "  to predict        " + fixed(report.predict_ms / 1e3, 1) + " s, " +
          std::to_string(report.predict_spikes) + " spikes\n";
  text += "  spikes            " +
          (report.spike_detection.empty() ? std::string("as listed in the files")
                                          : "found where not listed: " + report.spike_detection) +
          '\n';
  text += "  intervals         CV " + significant_or_dash(report.interval_cv) + ", " +
          std::to_string(report.intervals_under_2ms) + " under 2 ms\n\n";

  using Align = Table::Align;
  const std::vector<Align> numbers = {Align::left,  Align::left,  Align::right, Align::right,
                                      Align::right, Align::right, Align::right, Align::right};
  Table signals({"sweep", "use", "every ms", "length s", "mean " + report.input_unit,
                 "SD " + report.input_unit, "corr. ms", "90 % Hz"},
                numbers);
  Table responses(
      {"sweep", "origin", "spikes", "rate Hz", "CV", "shortest ms", "V low mV", "V high mV"},
      numbers);
  for (const SweepQuality& sweep : report.sweeps) {
    const std::string name = short_name(sweep.name);
    signals.add({name, word_for(sweep.use), significant(sweep.step_ms, 4),
                 fixed(sweep.analysed_ms / 1e3, 2), significant(sweep.input.mean, 3),
                 significant(sweep.input.standard_deviation, 3),
                 significant_or_dash(sweep.input.correlation_time_ms),
                 significant_or_dash(sweep.input.bandwidth_Hz)});
    responses.add({name, word_for(sweep.spike_origin), std::to_string(sweep.spikes),
                   fixed(sweep.rate_Hz, 2), significant_or_dash(sweep.interval_cv),
                   significant_or_dash(sweep.shortest_interval_ms),
                   sweep.voltage ? fixed(sweep.voltage->minimum_mV, 1) : "-",
                   sweep.voltage ? fixed(sweep.voltage->maximum_mV, 1) : "-"});
  }
  text += std::string(report.input_is_current ? "Current" : "Driving signal") +
          " (corr.: lag where the autocorrelation falls to 1/e; 90 %: that share of the\n" +
          "variance lies below)\n" + signals.str() + "\nResponse\n" + responses.str();

  text += "\nWhat these data can tell\n  " + wrap(report.identifiability_sentence, 2, 2) + "\n\n";
  text += "Findings\n";
  Table findings;
  for (const Finding& finding : report.findings) {
    std::string sentence = finding.topic + ": " + finding.what;
    if (!finding.sweep.empty()) {
      sentence = finding.sweep + ", " + sentence;
    }
    if (!finding.remedy.empty()) {
      sentence += ". " + finding.remedy;
      const std::size_t start = sentence.size() - finding.remedy.size();
      sentence[start] =
          static_cast<char>(std::toupper(static_cast<unsigned char>(sentence[start])));
    }
    findings.add({std::string(to_string(finding.grade)), sentence + '.'});
  }
  return text + findings.str();
}

int run_check(const std::string& sheet, bool anchored, const Session& session) {
  ReadOptions options;
  options.check_repeats = false;
  const Recording recording = read_cell_sheet(sheet, options);
  const QualityReport report = check_quality(recording, anchored);
  if (session.json) {
    std::fputs(report_json(report, recording).c_str(), stdout);
  } else if (!session.quiet) {
    std::fputs(report_text(report).c_str(), stdout);
  }
  return exit_done;
}

}  // namespace

void add_check(CLI::App& program, Session& session) {
  CLI::App* const command = program.add_subcommand(
      "check",
      "Say what was recorded from a cell and how good it is. Findings are graded fine, look or "
      "stop, "
      "each with what to do. The exit status is 0 whenever the data could be read, whatever the "
      "grades; a fit would refuse what is graded stop.");
  struct Arguments {
    std::string sheet;
    bool anchored = false;
  };
  const auto arguments = std::make_shared<Arguments>();
  command->add_option("SHEET", arguments->sheet, "The cell sheet (TOML)")->required();
  command->add_flag("--anchored", arguments->anchored,
                    "An anchor (input resistance or Delta in mV) will be given to the fit");
  command->footer("Example:\n  softsill check data/demo/n03/cell.toml");
  command->callback([arguments, &session] {
    session.run = [arguments, &session] {
      return run_check(arguments->sheet, arguments->anchored, session);
    };
  });
}

}  // namespace softsill::cli

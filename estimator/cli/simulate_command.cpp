// softsill simulate: from a model and a driving signal to spike trains.

#include <array>
#include <charconv>
#include <cmath>
#include <cstdint>
#include <cstdio>
#include <filesystem>
#include <memory>
#include <nlohmann/json.hpp>
#include <optional>
#include <string>
#include <system_error>

#include "estimator/cli/arguments.hpp"
#include "estimator/cli/command.hpp"
#include "estimator/cli/terminal.hpp"
#include "softsill/error.hpp"
#include "softsill/estimate.hpp"
#include "softsill/files.hpp"
#include "softsill/model_file.hpp"
#include "softsill/sheet.hpp"
#include "softsill/simulation.hpp"

namespace softsill::cli {
namespace {

struct SimulateArguments {
  std::string model;
  std::string current;
  std::string out;
  std::string before = "zero";
  double sampling_ms = 0.0;  // 0: the file tells
  SimulationOptions options;
};

/// A model to simulate, and what speaks against trusting it.
struct ReadModel {
  Model model;
  std::string doubt;
};

/// estimate.json, or a model file (TOML).
ReadModel read_either(const std::string& path) {
  const std::string text = read_text_file(path);
  const std::size_t first = text.find_first_not_of(" \t\r\n");
  if (first == std::string::npos || text[first] != '{') {
    return {parse_model(text, path), {}};
  }
  const Estimate estimate = read_estimate(path);
  std::string doubt;
  if (!trustworthy(estimate.status)) {
    doubt = "the estimate is not to be trusted (" + std::string(to_string(estimate.status)) +
            "): " + estimate.status_sentence;
  }
  return {estimate.model, doubt};
}

std::optional<double> number_in(const std::string& text, std::size_t from) {
  double value = 0.0;
  const char* end = text.data() + text.size();
  const auto read = std::from_chars(text.data() + from, end, value);
  if (read.ec != std::errc{} || read.ptr != end || !std::isfinite(value)) {
    return std::nullopt;
  }
  return value;
}

/// The input before the first sample by "zero", "first" or "holding=VALUE"; empty for other words.
std::optional<double> value_before(const std::string& word, double first_sample) {
  const std::string holding = "holding=";
  if (word == "first") {
    return first_sample;
  }
  if (word == "zero") {
    return 0.0;
  }
  return word.starts_with(holding) ? number_in(word, holding.size()) : std::nullopt;
}

std::string positive_number(const std::string& text) {
  const std::optional<double> value = number_in(text, 0);
  return value && *value > 0.0 ? std::string() : "'" + text + "' is not a positive number";
}

void append(std::string& out, double value) {
  std::array<char, 32> buffer;
  const auto end = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value);
  out.append(buffer.data(), end.ptr);
}

void append_fixed(std::string& out, double value) {
  std::array<char, 400> buffer;
  const auto end = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value,
                                 std::chars_format::fixed, 6);
  out.append(buffer.data(), end.ptr);
}

std::string trains_csv(const SimulationResult& result) {
  std::string out = "trial,spike_ms\n";
  for (std::size_t trial = 0; trial < result.trains_ms.size(); ++trial) {
    const std::string number = std::to_string(trial + 1) + ',';
    for (double time : result.trains_ms[trial]) {
      out += number;
      append(out, time);
      out += '\n';
    }
  }
  return out;
}

std::string mean_voltage_csv(const SimulationResult& result) {
  std::string out = "time_ms,mean_u_mV\n";
  for (std::size_t i = 0; i < result.mean_voltage_mV.size(); ++i) {
    append_fixed(out, result.start_ms + (static_cast<double>(i) + 0.5) * result.step_ms);
    out += ',';
    append_fixed(out, result.mean_voltage_mV[i]);
    out += '\n';
  }
  return out;
}

nlohmann::ordered_json summary(const Session& session, const SimulateArguments& given,
                               const SimulationResult& result, double before,
                               const std::string& doubt) {
  nlohmann::ordered_json out;
  out["schema_version"] = 1;
  out["trials"] = result.trains_ms.size();
  out["start_ms"] = result.start_ms;
  out["end_ms"] = result.end_ms;
  out["step_ms"] = result.step_ms;
  out["input_before_start"] = before;
  out["spikes"] = result.spike_count();
  out["mean_rate_hz"] = result.mean_rate_hz();
  const std::optional<double> variation = result.interval_cv();
  out["interval_cv"] = variation ? nlohmann::ordered_json(*variation) : nullptr;
  out["spikes_per_trial"] = nlohmann::ordered_json::array();
  for (const auto& train : result.trains_ms) {
    out["spikes_per_trial"].push_back(train.size());
  }
  out["runaways"] = nlohmann::ordered_json::array();
  for (const Runaway& runaway : result.runaways) {
    out["runaways"].push_back({{"trial", runaway.trial + 1}, {"stopped_ms", runaway.stopped_ms}});
  }
  out["silent"] = result.spike_count() == 0;
  out["doubt"] = doubt.empty() ? nlohmann::ordered_json(nullptr) : nlohmann::ordered_json(doubt);
  nlohmann::ordered_json& provenance = out["provenance"];
  provenance["program_version"] = SOFTSILL_VERSION;
  provenance["command_line"] = session.command_line;
  provenance["seed"] = given.options.seed;
  for (const std::string& path : {given.model, given.current}) {
    provenance["inputs"].push_back({{"path", path}, {"sha256", sha256_of_file(path)}});
  }
  return out;
}

std::string doubt_about(const SimulationResult& result, const std::string& about_model) {
  std::string doubt = about_model;
  if (!result.runaways.empty()) {
    doubt += doubt.empty() ? "" : "; ";
    doubt += std::to_string(result.runaways.size()) + " of " +
             std::to_string(result.trains_ms.size()) +
             " trials ran away and were stopped: their rate left what a cell can fire";
  }
  return doubt;
}

SimulationResult simulate_with_progress(const Model& model, const DrivingInput& driving,
                                        SimulationOptions options, bool quiet) {
  ProgressLine line(!quiet);
  catch_interrupts();
  options.progress = [&line](double share) {
    line.show(share, "simulating");
    return !interrupted();
  };
  return simulate(model, driving, options);
}

/// Writes all files and says what each holds.
std::string write_results(const SimulationResult& result, const Model& model,
                          const std::string& summary_text, const std::string& directory) {
  Table files;
  const auto path_of = [&](const char* name) {
    return (std::filesystem::path(directory) / name).string();
  };
  const auto put = [&](const char* name, const std::string& text, const char* what) {
    write_file_atomically(path_of(name), text);
    files.add({path_of(name), what});
  };
  put("trains.csv", trains_csv(result), "trial, spike_ms");
  if (!result.mean_voltage_mV.empty()) {
    put("mean_voltage.csv", mean_voltage_csv(result), "time_ms, mean_u_mV: without the spikes");
  } else {
    // One left by an earlier run would belong to other trains.
    std::error_code ignored;
    std::filesystem::remove(path_of("mean_voltage.csv"), ignored);
  }
  put("model.toml", to_toml(model), "the model, to be edited by hand and simulated again");
  put("simulation.json", summary_text, "summary and provenance");
  return files.str();
}

int run_simulate(const Session& session, const SimulateArguments& given) {
  const ReadModel read = read_either(given.model);
  const bool current = read.model.input_unit == "nA";
  const Sweep sweep = read_recording_file(
      given.current, current ? std::string() : read.model.input_unit,
      given.sampling_ms > 0.0 ? std::optional<double>(given.sampling_ms) : std::nullopt);
  const std::optional<double> before = value_before(given.before, sweep.input.front());
  const DrivingInput driving{sweep.input, sweep.start_ms, sweep.step_ms, before.value()};
  make_directory(given.out);

  const SimulationResult result =
      simulate_with_progress(read.model, driving, given.options, session.quiet);
  if (result.interrupted) {
    std::fprintf(stderr, "softsill: interrupted; nothing was written\n");
    return exit_interrupted;
  }
  const std::string doubt = doubt_about(result, read.doubt);
  const std::string json = summary(session, given, result, *before, doubt).dump(2) + "\n";
  const std::string files = write_results(result, read.model, json, given.out);
  if (session.json) {
    std::fputs(json.c_str(), stdout);
  } else if (!session.quiet) {
    Table table;
    const std::optional<double> variation = result.interval_cv();
    table.add({"trials", std::to_string(result.trains_ms.size()) + " of " +
                             fixed((result.end_ms - result.start_ms) / 1000.0, 3) + " s"});
    table.add({"spikes", std::to_string(result.spike_count())});
    table.add({"mean rate", fixed(result.mean_rate_hz(), 2) + " Hz"});
    table.add({"CV of intervals", variation ? fixed(*variation, 2) : "too few intervals"});
    table.add({"seed", std::to_string(given.options.seed)});
    std::printf("Simulated\n%s\nWritten\n%s", table.str().c_str(), files.c_str());
  }
  if (!doubt.empty()) {
    std::fprintf(stderr, "softsill: %s\n", doubt.c_str());
    return exit_not_trustworthy;
  }
  return exit_done;
}

}  // namespace

void add_simulate(CLI::App& program, Session& session) {
  auto given = std::make_shared<SimulateArguments>();
  SimulationOptions& options = given->options;
  CLI::App* command = program.add_subcommand(
      "simulate",
      "Draw spike trains of a model under a driving signal. Each trial starts without past spikes "
      "and has random numbers of its own, so the same seed gives the same trains with any number "
      "of threads.");
  command
      ->add_option("MODEL", given->model,
                   "estimate.json of a fit, or a model file (TOML) written by hand")
      ->required();
  command
      ->add_option("--current", given->current,
                   "Driving signal: CSV with time_ms and current_nA (or input), or NPY")
      ->type_name("FILE")
      ->required()
      ->group("Input");
  command
      ->add_option("--before", given->before,
                   "Input before the first sample: zero, first (its value), or holding=VALUE")
      ->type_name("WORD")
      ->check([](const std::string& text) {
        return value_before(text, 0.0) ? std::string()
                                       : "'" + text + "' is not zero, first or holding=VALUE";
      })
      ->group("Input");
  command
      ->add_option("--sampling-ms", given->sampling_ms,
                   "Sampling interval of an NPY file without a time column, in ms; 0: the file "
                   "has the time")
      ->type_name("MS")
      ->check([](const std::string& text) { return positive_number(text); })
      ->group("Input");
  command->add_option("--trials", options.trials, "Number of trials")
      ->type_name("N")
      ->check([](const std::string& text) { return whole_number(text, 1, 10'000'000); })
      ->group("Simulation");
  command->add_option("--seed", options.seed, "Seed of the random numbers")
      ->type_name("N")
      ->group("Simulation");
  command->add_option("--step-ms", options.step_ms, "Step of the simulation, in ms")
      ->type_name("MS")
      ->check([](const std::string& text) { return positive_number(text); })
      ->group("Simulation");
  command
      ->add_option("--threads", options.threads,
                   "Threads, 0 for all cores; results do not depend on it")
      ->type_name("N")
      ->check([](const std::string& text) { return whole_number(text, 0, 10'000'000); })
      ->group("Simulation");
  command
      ->add_option("--runaway-hz", options.runaway_hz,
                   "A trial that holds this rate (or 90 % of the ceiling its refractory time sets) "
                   "for 200 ms is stopped and reported, in Hz")
      ->type_name("HZ")
      ->check([](const std::string& text) { return positive_number(text); })
      ->group("Simulation");
  command->add_option("-o,--out", given->out, "Directory for the results, made when missing")
      ->type_name("DIR")
      ->required()
      ->group("Output");
  command
      ->add_flag("--mean-voltage", options.mean_voltage,
                 "Also write the mean of the potential over trials, in mV")
      ->group("Output");
  command->footer(
      "Exit status 3: the files are written, but trials ran away or the estimate was not to be "
      "trusted.\n\n"
      "Example:\n  softsill simulate results/n03/estimate.json --current "
      "data/demo/n03/frozen.csv.gz \\\n      --trials 100 --seed 1 --out results/n03/simulated");
  command->callback([given, &session] {
    session.run = [given, &session] { return run_simulate(session, *given); };
  });
}

}  // namespace softsill::cli

// softsill fit: from a cell sheet to an estimate on disk and on the screen.

#include <charconv>
#include <cmath>
#include <cstdio>
#include <filesystem>
#include <memory>
#include <string>
#include <system_error>

#include "estimator/cli/arguments.hpp"
#include "estimator/cli/command.hpp"
#include "estimator/cli/estimate_text.hpp"
#include "estimator/cli/terminal.hpp"
#include "softsill/equations.hpp"
#include "softsill/error.hpp"
#include "softsill/files.hpp"
#include "softsill/fit.hpp"
#include "softsill/quality.hpp"
#include "softsill/sheet.hpp"

namespace softsill::cli {
namespace {

struct FitArguments {
  std::string sheet;
  std::string out;
  std::string variant;
  std::string anchor;
  std::string before = "unknown";
  bool spikes_alone = false;
  FitOptions options;
};

/// "unknown", "first", "zero" or "holding=VALUE". \throws Error on anything else
void parse_before(const std::string& text, FitOptions& options) {
  options.before.reset();
  options.holding = 0.0;
  const std::string holding = "holding=";
  if (text == "first") {
    options.before = Before::first_value;
  } else if (text == "zero") {
    options.before = Before::zero;
  } else if (text.starts_with(holding)) {
    const char* end = text.data() + text.size();
    const auto read = std::from_chars(text.data() + holding.size(), end, options.holding);
    if (read.ec != std::errc{} || read.ptr != end || !std::isfinite(options.holding)) {
      throw Error("", "before '" + text + "'", "cannot be read",
                  "write holding=0.05 with the value in nA (or the sheet's input unit)");
    }
    options.before = Before::holding;
  } else if (text != "unknown") {
    throw Error("", "before '" + text + "'", "is not known",
                "write unknown, first, zero or holding=VALUE");
  }
}

/// Makes a CLI11 check out of a parser that throws Error, so that a bad value is a usage error.
template <typename Parser>
auto checked_by(Parser parser) {
  return [parser](const std::string& text) -> std::string {
    try {
      parser(text);
    } catch (const Error& error) {
      return error.what();
    }
    return {};
  };
}

/// Writes all files of a fit and says what each holds.
std::string write_results(const Estimate& estimate, const std::string& directory) {
  Table files;
  const auto put = [&](const char* name, const std::string& text, const char* what) {
    const std::string path = (std::filesystem::path(directory) / name).string();
    write_file_atomically(path, text);
    files.add({path, what});
  };
  put("estimate.json", to_json(estimate), "everything, for later commands");
  put("kernels.csv", kernels_csv(estimate), "kernel, lag_ms, value, low, high, unit");
  put("parameters.csv", parameters_csv(estimate), "name, value, low, high, unit, method");
  if (trustworthy(estimate.status) && why_no_equations(estimate.model).empty()) {
    put("equations.csv", equations_csv(integrate_and_fire_equations(estimate.model)),
        "the same model as integrate-and-fire equations");
  } else {
    // One left by an earlier fit would belong to another model.
    std::error_code ignored;
    std::filesystem::remove(std::filesystem::path(directory) / "equations.csv", ignored);
  }
  return files.str();
}

Estimate fit_with_progress(const Recording& recording, const Variant& variant, FitOptions options,
                           bool quiet) {
  ProgressLine line(!quiet);
  catch_interrupts();
  options.progress = [&line](double share, const std::string& what) {
    line.show(share, what);
    return !interrupted();
  };
  return fit(recording, variant, options);
}

int run_fit(const Session& session, const FitArguments& given) {
  FitOptions options = given.options;
  parse_before(given.before, options);
  if (!given.anchor.empty()) {
    options.anchor = parse_anchor(given.anchor);
  }
  Variant variant = given.variant.empty() ? Variant{} : read_variant(given.variant);
  if (given.spikes_alone) {
    variant.use_voltage = false;
  }
  const Recording recording = read_cell_sheet(given.sheet);
  require_fittable(recording);
  make_directory(given.out);

  const bool talk = !session.quiet && !session.json;
  if (talk) {
    std::printf("Cell %s, variant %s\n%s\n", recording.cell.c_str(), variant.name.c_str(),
                spikes_text(recording).c_str());
    std::fflush(stdout);
  }
  Estimate estimate = fit_with_progress(recording, variant, options, session.quiet);
  if (estimate.status == FitStatus::interrupted) {
    std::fprintf(stderr, "softsill: interrupted; nothing was written\n");
    return exit_interrupted;
  }
  estimate.provenance.program_version = SOFTSILL_VERSION;
  estimate.provenance.command_line = session.command_line;
  estimate.provenance.seed = options.seed;
  estimate.provenance.inputs = recording.files;
  if (!given.variant.empty()) {
    estimate.provenance.inputs.push_back({given.variant, sha256_of_file(given.variant)});
  }
  const std::string files = write_results(estimate, given.out);
  if (session.json) {
    std::fputs(to_json(estimate).c_str(), stdout);
  } else if (talk) {
    std::printf("%s\nWritten\n%s", estimate_text(estimate).c_str(), files.c_str());
  }
  if (!trustworthy(estimate.status)) {
    std::fprintf(stderr, "softsill: not to be trusted (%s): %s\n",
                 std::string(to_string(estimate.status)).c_str(), estimate.status_sentence.c_str());
    return exit_not_trustworthy;
  }
  return exit_done;
}

}  // namespace

void add_fit(CLI::App& program, Session& session) {
  auto given = std::make_shared<FitArguments>();
  CLI::App* command = program.add_subcommand(
      "fit",
      "Estimate noise level, threshold, resting potential and kernels of one cell. Maximises the "
      "likelihood of the spikes, and of the potential where it was recorded, over the sweeps "
      "marked "
      "use = \"estimate\"; says what the data cannot tell.");
  command->add_option("SHEET", given->sheet, "Cell sheet (TOML): which recordings, which spikes")
      ->required();
  command->add_option("-o,--out", given->out, "Directory for the results, made when missing")
      ->type_name("DIR")
      ->required()
      ->group("Output");

  command
      ->add_option(
          "--variant", given->variant,
          "Variant file (TOML): which kernels, which escape function; without it all three "
          "kernels as smoothed splines and the exponential escape function")
      ->type_name("FILE")
      ->group("Model");
  command
      ->add_flag("--spikes-alone", given->spikes_alone,
                 "Leave the potential unused even where it was recorded")
      ->group("Model");

  command
      ->add_option("--anchor", given->anchor,
                   "Known number that gives spikes alone the mV scale: resistance=120±8MOhm or "
                   "noise_level=1.5±0.2mV (+- may stand for ±)")
      ->type_name("NAME=VALUE")
      ->check(checked_by([](const std::string& text) { parse_anchor(text); }))
      ->group("Data");
  command
      ->add_option(
          "--before", given->before,
          "Input before each sweep: unknown (the first kernel length of every sweep is left "
          "out), first (its first value), zero, or holding=VALUE in nA")
      ->type_name("WORD")
      ->check(checked_by([](const std::string& text) {
        FitOptions scratch;
        parse_before(text, scratch);
      }))
      ->group("Data");

  command
      ->add_option("--starts", given->options.starts,
                   "Starting points where the likelihood may have several maxima")
      ->type_name("N")
      ->check([](const std::string& text) { return whole_number(text, 1, 1'000'000); })
      ->group("Search");
  command
      ->add_option("--max-iterations", given->options.max_iterations,
                   "Iterations of one maximisation")
      ->type_name("N")
      ->check([](const std::string& text) { return whole_number(text, 1, 1'000'000); })
      ->group("Search");
  command->add_option("--seed", given->options.seed, "Seed of the extra starting points")
      ->type_name("N")
      ->group("Search");
  command
      ->add_option("--threads", given->options.threads,
                   "Threads, 0 for all cores; results do not depend on it")
      ->type_name("N")
      ->check([](const std::string& text) { return whole_number(text, 0, 1'000'000); })
      ->group("Search");
  command->add_option("--level", given->options.level, "Level of all intervals")
      ->type_name("SHARE")
      ->check([](const std::string& text) -> std::string {
        const std::string bad = "'" + text + "' is not between 0.5 and 0.999";
        double value = 0.0;
        const auto read = std::from_chars(text.data(), text.data() + text.size(), value);
        return read.ec == std::errc{} && value >= 0.5 && value <= 0.999 ? std::string() : bad;
      })
      ->group("Search");
  command->footer(
      "Exit status 3: the files are written, but the estimate is not to be trusted; why is "
      "printed.\n\n"
      "Example:\n  softsill fit data/demo/n03/cell.toml --out results/n03 --before zero");
  command->callback(
      [given, &session] { session.run = [given, &session] { return run_fit(session, *given); }; });
}

}  // namespace softsill::cli

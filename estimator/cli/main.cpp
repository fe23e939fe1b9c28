// The program: finds the command, runs it, and turns whatever goes wrong into one line and an exit
// status. Everything a command does lives in its own file.

#include <CLI/CLI.hpp>
#include <algorithm>
#include <cstdio>
#include <exception>
#include <memory>
#include <new>
#include <string>
#include <vector>

#include "estimator/cli/command.hpp"
#include "estimator/cli/help_text.hpp"
#include "softsill/error.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill::cli {
namespace {

/// As a shell would need it to be typed again.
std::string as_typed(int argc, char** argv) {
  std::string line;
  for (int i = 0; i < argc; ++i) {
    const std::string word = i == 0 ? "softsill" : argv[i];
    const bool plain =
        !word.empty() && word.find_first_of(" \t\n'\"\\$&|;<>()*?[]#~`!{}") == std::string::npos;
    line += i == 0 ? "" : " ";
    if (plain) {
      line += word;
      continue;
    }
    line += '\'';
    for (const char c : word) {
      line += c == '\'' ? std::string("'\\''") : std::string(1, c);
    }
    line += '\'';
  }
  return line;
}

/// One line, whatever the message holds.
int fail(const std::string& message, int status) {
  std::string line = message;
  std::replace(line.begin(), line.end(), '\n', ' ');
  std::fprintf(stderr, "softsill: %s\n", line.c_str());
  return status;
}

std::vector<std::string> command_names(CLI::App& program) {
  std::vector<std::string> names;
  for (const CLI::App* command : program.get_subcommands({})) {
    names.push_back(command->get_name());
  }
  return names;
}

/// Empty when the first word is a known command, or when there is none. CLI11 2.1 would answer a
/// mistyped command with "A subcommand is required".
std::string unknown_command(CLI::App& program, int argc, char** argv) {
  for (int i = 1; i < argc; ++i) {
    const std::string word = argv[i];
    if (word.empty() || word[0] == '-') {
      continue;
    }
    const std::vector<std::string> names = command_names(program);
    if (std::find(names.begin(), names.end(), word) != names.end()) {
      return {};
    }
    return "unknown command '" + word + "'; the nearest is '" + nearest_word(word, names) +
           "' (softsill --help lists all)";
  }
  return {};
}

std::vector<std::string> option_names(const CLI::App& program, const CLI::App& command) {
  std::vector<std::string> names;
  for (const CLI::App* app : {&command, &program}) {
    for (const CLI::Option* option : app->get_options()) {
      for (const std::string& name : option->get_lnames()) {
        names.push_back("--" + name);
      }
    }
  }
  return names;
}

/// CLI11's message, or a better one where it leaves the reader guessing.
std::string usage_message(CLI::App& program, const CLI::ParseError& error) {
  const std::vector<CLI::App*> chosen = program.get_subcommands();
  CLI::App* command = chosen.empty() ? &program : chosen.front();
  const std::string name =
      command == &program ? std::string("softsill") : "softsill " + command->get_name();
  const std::string see = "; see " + name + " --help";
  // A mistyped option also makes what follows it look missing or unexpected: name it first.
  for (const std::string& word : program.remaining(true)) {
    if (word.size() > 1 && word[0] == '-') {
      const std::string typed = word.substr(0, word.find('='));
      return "unknown option '" + typed + "'; the nearest is " +
             nearest_word(typed, option_names(program, *command)) + see;
    }
  }
  if (dynamic_cast<const CLI::ExtrasError*>(&error) != nullptr) {
    return "unexpected argument '" + program.remaining(true).front() + "'" + see;
  }
  std::string text = error.what();
  // Validators of CLI11 can print limits of 309 digits.
  if (text.size() > 300) {
    text = text.substr(0, 300) + "...";
  }
  return text + see;
}

int run_program(int argc, char** argv) {
  Session session;
  session.command_line = as_typed(argc, argv);

  CLI::App program(
      "softsill estimates the noise level and the kernels of an escape-noise neuron model from "
      "current-clamp recordings. Times in ms, potentials in mV, currents in nA, resistances in "
      "MOhm, rates in Hz.",
      "softsill");
  program.formatter(std::make_shared<HelpText>());
  program.option_defaults()->always_capture_default();
  program.fallthrough();
  program.require_subcommand(0, 1);
  program.set_help_flag("-h,--help", "Print this help and leave");
  program
      .set_version_flag("--version", "softsill " SOFTSILL_VERSION, "Print the version and leave")
      ->group(HelpText::everywhere_group);
  program.add_flag("-q,--quiet", session.quiet, "Errors only")->group(HelpText::everywhere_group);
  program.add_flag("--json", session.json, "Results on stdout as one JSON document")
      ->group(HelpText::everywhere_group);
  add_check(program, session);
  add_fit(program, session);
  add_simulate(program, session);
  program.get_subcommand("check")->group("Look at a recording");
  program.get_subcommand("fit")->group("Estimate and use a model");
  program.get_subcommand("simulate")->group("Estimate and use a model");
  program.footer(
      "Exit status: 0 done, 1 data or file error, 2 usage, 3 finished but the estimate is not to "
      "be\n"
      "trusted, 130 interrupted.\n\n"
      "Example:\n  softsill check cell.toml && softsill fit cell.toml --out fitted\n\n"
      "For research. Not a medical device, and no basis for stimulating people.");

  if (argc < 2) {
    std::fputs(program.help().c_str(), stdout);
    return exit_usage;
  }
  if (const std::string message = unknown_command(program, argc, argv); !message.empty()) {
    return fail(message, exit_usage);
  }
  try {
    program.parse(argc, argv);
  } catch (const CLI::CallForHelp&) {
    std::fputs(program.help().c_str(), stdout);
    return exit_done;
  } catch (const CLI::CallForVersion& version) {
    std::fprintf(stdout, "%s\n", version.what());
    return exit_done;
  } catch (const CLI::ParseError& error) {
    return fail(usage_message(program, error), exit_usage);
  }
  if (!session.run) {
    return fail("no command given; see softsill --help", exit_usage);
  }
  const int status = session.run();
  // A full disk shows itself only when the buffer is written out.
  if (std::fflush(stdout) != 0 || std::ferror(stdout) != 0) {
    return fail("standard output cannot be written", exit_data_error);
  }
  return status;
}

}  // namespace
}  // namespace softsill::cli

int main(int argc, char** argv) {
  using softsill::cli::fail;
  try {
    return softsill::cli::run_program(argc, argv);
  } catch (const softsill::Error& error) {
    return fail(error.what(), softsill::cli::exit_data_error);
  } catch (const CLI::ParseError& error) {
    return fail(error.what(), softsill::cli::exit_usage);
  } catch (const softsill::InternalError& error) {
    return fail(std::string("this is a mistake in softsill, please report it: ") + error.what(),
                softsill::cli::exit_data_error);
  } catch (const std::bad_alloc&) {
    return fail("out of memory", softsill::cli::exit_data_error);
  } catch (const std::exception& error) {
    return fail(std::string("this is a mistake in softsill, please report it: ") + error.what(),
                softsill::cli::exit_data_error);
  }
}

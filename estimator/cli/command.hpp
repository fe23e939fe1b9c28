#pragma once

/// \file command.hpp
/// What every subcommand shares: how it is added to the program and how it ends.

#include <CLI/CLI.hpp>
#include <functional>
#include <string>

namespace softsill::cli {

/// Exit statuses of the program, documented in README.
enum ExitStatus : int {
  exit_done = 0,
  exit_data_error = 1,       ///< data or file error (softsill::Error)
  exit_usage = 2,            ///< unknown command, option or value
  exit_not_trustworthy = 3,  ///< finished, but the estimate is not to be trusted
  exit_interrupted = 130
};

/// One run of the program.
struct Session {
  std::string command_line;  ///< for provenance, as typed
  bool quiet = false;        ///< --quiet: errors only
  bool json = false;         ///< --json: results on stdout as one JSON document
  std::function<int()> run;  ///< set by the chosen subcommand; returns an ExitStatus
};

// Each adds one subcommand to the program: options grouped, every default shown, one example in the
// footer. The callback only stores into session.run; main runs it and maps exceptions.
void add_check(CLI::App& program, Session& session);
void add_fit(CLI::App& program, Session& session);
void add_simulate(CLI::App& program, Session& session);

}  // namespace softsill::cli

#pragma once

// Runs R (Debian r-base-core) while the test runs. Tables go over as CSV, results come back as
// "name" followed by its numbers, all at 17 digits.

#include <gtest/gtest.h>
#include <unistd.h>

#include <Eigen/Core>
#include <cstdio>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <map>
#include <sstream>
#include <stdexcept>
#include <string>
#include <vector>

namespace softsill::reference {

inline bool has_rscript() { return !std::string(SOFTSILL_RSCRIPT).empty(); }

/// Skips the test, by name of what is missing.
#define SKIP_WITHOUT_R()                                               \
  if (!::softsill::reference::has_rscript()) {                         \
    GTEST_SKIP() << "Rscript is missing (Debian package r-base-core)"; \
  }

/// One run of R in a directory of its own.
class RScript {
 public:
  RScript() {
    std::string name = (std::filesystem::temp_directory_path() / "softsill_r_XXXXXX").string();
    if (::mkdtemp(name.data()) == nullptr) {
      throw std::runtime_error("no temporary directory");
    }
    directory_ = name;
  }
  RScript(const RScript&) = delete;
  RScript& operator=(const RScript&) = delete;
  ~RScript() { std::filesystem::remove_all(directory_); }

  /// `name`.csv without a header; read it in R by read_table("name").
  void give(const std::string& name, const Eigen::MatrixXd& table) const {
    std::ofstream out(directory_ + "/" + name + ".csv");
    char text[40];
    for (Eigen::Index i = 0; i < table.rows(); ++i) {
      for (Eigen::Index j = 0; j < table.cols(); ++j) {
        std::snprintf(text, sizeof text, "%.17g", table(i, j));
        out << (j > 0 ? "," : "") << text;
      }
      out << "\n";
    }
  }

  /// Runs `code`, in which say("name", numbers) hands numbers back.
  /// \throws std::runtime_error with what R said when it fails
  void run(const std::string& code) {
    std::ofstream(directory_ + "/script.R")
        << "options(digits = 17, warn = 1)\n"
           "read_table <- function(name) {\n"
           "  unname(as.matrix(read.csv(paste0(name, '.csv'), header = FALSE)))\n"
           "}\n"
           "out <- file('out.txt', 'w')\n"
           "say <- function(name, x) cat(name, sprintf('%.17g', as.numeric(x)), '\\n', file = "
           "out)\n"
        << code << "\nclose(out)\n";
    const std::string command =
        "cd '" + directory_ + "' && '" + SOFTSILL_RSCRIPT + "' --vanilla script.R > log.txt 2>&1";
    const int status = std::system(command.c_str());
    std::stringstream log;
    log << std::ifstream(directory_ + "/log.txt").rdbuf();
    if (status != 0) {
      throw std::runtime_error("R failed:\n" + log.str());
    }
    std::ifstream in(directory_ + "/out.txt");
    for (std::string line; std::getline(in, line);) {
      std::istringstream words(line);
      std::string name;
      words >> name;
      std::vector<double>& numbers = said_[name];
      for (std::string word; words >> word;) {
        numbers.push_back(std::strtod(word.c_str(), nullptr));
      }
    }
  }

  const std::vector<double>& said(const std::string& name) const { return said_.at(name); }
  double number(const std::string& name) const { return said(name).at(0); }

 private:
  std::string directory_;
  std::map<std::string, std::vector<double>> said_;
};

}  // namespace softsill::reference

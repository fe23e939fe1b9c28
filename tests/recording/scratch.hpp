#pragma once

// A folder of its own for each test, removed afterwards, and messages of errors as text.

#include <gtest/gtest.h>

#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <string>

#include "softsill/error.hpp"

namespace softsill::test {

class Scratch : public ::testing::Test {
 protected:
  Scratch() {
    std::string name = (std::filesystem::temp_directory_path() / "softsill-XXXXXX").string();
    if (::mkdtemp(name.data()) == nullptr) {
      throw std::runtime_error("no temporary folder can be made");
    }
    folder_ = name;
  }
  ~Scratch() override { std::filesystem::remove_all(folder_); }

  std::string path(const std::string& name) const { return (folder_ / name).string(); }

  std::string write(const std::string& name, const std::string& text) const {
    std::ofstream(path(name), std::ios::binary) << text;
    return path(name);
  }

 private:
  std::filesystem::path folder_;
};

/// what() of the Error that `action` throws; "(no error)" when it throws none.
template <typename Action>
std::string error_of(const Action& action) {
  try {
    action();
  } catch (const Error& error) {
    return error.what();
  }
  return "(no error)";
}

}  // namespace softsill::test

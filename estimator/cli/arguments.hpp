#pragma once

/// \file arguments.hpp
/// What several commands ask of their arguments.

#include <string>

namespace softsill::cli {

/// A CLI11 check: empty for a whole number of at least `least` and at most `most`, else what is
/// wrong.
std::string whole_number(const std::string& text, long long least, long long most);

/// Makes a directory with its parents; one that is there is fine. \throws Error
void make_directory(const std::string& path);

}  // namespace softsill::cli

#pragma once

/// \file plain_number.hpp
/// Numbers inside sentences.

#include <cstdio>
#include <string>

namespace softsill {

/// printf-formatted, three significant digits unless asked otherwise.
inline std::string plain_number(double value, const char* format = "%.3g") {
  char text[64];
  std::snprintf(text, sizeof text, format, value);
  return text;
}

}  // namespace softsill

#pragma once

// Sentences with numbers in them.

#include <cstdarg>
#include <cstdio>
#include <string>

namespace softsill {

/// std::printf into a string of at most 399 characters.
__attribute__((format(printf, 1, 2))) inline std::string say(const char* format, ...) {
  char text[400];
  std::va_list values;
  va_start(values, format);
  std::vsnprintf(text, sizeof text, format, values);
  va_end(values);
  return text;
}

}  // namespace softsill

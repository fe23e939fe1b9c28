#include "estimator/cli/arguments.hpp"

#include <charconv>
#include <filesystem>
#include <system_error>

#include "softsill/error.hpp"

namespace softsill::cli {

std::string whole_number(const std::string& text, long long least, long long most) {
  long long value = 0;
  const char* end = text.data() + text.size();
  const auto read = std::from_chars(text.data(), end, value);
  if (read.ec != std::errc{} || read.ptr != end || value < least || value > most) {
    return "'" + text + "' is not a whole number of at least " + std::to_string(least);
  }
  return {};
}

void make_directory(const std::string& path) {
  std::error_code failure;
  std::filesystem::create_directories(path, failure);
  if (failure || !std::filesystem::is_directory(path)) {
    throw Error(path, "", "cannot be made a directory",
                failure ? failure.message() : "a file of that name is in the way");
  }
}

}  // namespace softsill::cli

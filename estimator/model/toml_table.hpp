#pragma once

/// \file toml_table.hpp
/// Reading our TOML files: every value is checked for type and range where it is read, every key
/// that nobody asked for is an error, and every message carries the line.

#include <functional>
#include <memory>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

namespace softsill {

/// Allowed range of a number, with how to say it.
struct Range {
  double low, high;
  bool low_allowed = true;
};
inline constexpr double largest_number = 1e9;
inline constexpr Range positive{0.0, largest_number, false};
inline constexpr Range not_negative{0.0, largest_number, true};
inline constexpr Range any_number{-largest_number, largest_number, true};

/// One table of a TOML file. Copies share the file. Asking for a key makes it known.
class TomlTable {
 public:
  /// \throws Error with the line when the text is not TOML
  static TomlTable parse(const std::string& text, const std::string& path);

  bool has(std::string_view key) const;
  bool holds_text(std::string_view key) const;

  // Each returns nothing when the key is absent and throws Error when it holds something else or is
  // out of range.
  std::optional<double> number(std::string_view key, Range range);
  std::optional<int> whole_number(std::string_view key, int low, int high);
  std::optional<bool> flag(std::string_view key);
  std::optional<std::string> text(std::string_view key);
  std::optional<std::vector<double>> numbers(std::string_view key, Range range);
  std::optional<TomlTable> table(std::string_view key);

  /// \throws Error at the line of `key` (or of the table when the key is absent)
  [[noreturn]] void fail(std::string_view key, const std::string& what,
                         const std::string& remedy = {}) const;
  /// Runs `make` and gives its Error this file and the line of `key`.
  void at(std::string_view key, const std::function<void()>& make) const;
  /// \throws Error for the first key that is not among the keys asked for so far or `also_known`
  void reject_unknown(const std::vector<std::string>& also_known = {}) const;
  /// \throws Error when a key is present, saying why it has no place here
  void reject(const std::vector<std::string>& keys, const std::string& why) const;

 private:
  struct Inside;
  explicit TomlTable(std::shared_ptr<Inside> inside) : inside_(std::move(inside)) {}
  std::shared_ptr<Inside> inside_;
};

/// Shortest text that reads back as the same number and is a TOML number.
std::string toml_number(double value);
std::string toml_numbers(const std::vector<double>& values);
/// A quoted TOML string.
std::string toml_text(const std::string& text);

}  // namespace softsill

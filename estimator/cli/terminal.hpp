#pragma once

/// \file terminal.hpp
/// What a person sees: aligned tables, wrapped sentences, one rewritten progress line, Ctrl-C.

#include <cstddef>
#include <string>
#include <string_view>
#include <vector>

#include "softsill/estimate.hpp"

namespace softsill::cli {

/// No line of output is longer than this many columns.
constexpr std::size_t page_width = 100;

/// Columns a UTF-8 text takes on a terminal: one per code point, which holds for the few
/// non-ASCII letters used here.
std::size_t width_of(std::string_view text);

/// Breaks text at spaces so that no line is longer than `width`; every line after the first starts
/// with `indent` spaces, and the first is assumed to start at column `first`.
std::string wrap(std::string_view text, std::size_t indent = 0, std::size_t first = 0,
                 std::size_t width = page_width);

/// Columns padded to the widest cell, two spaces apart. Without a heading when `heading` is empty.
class Table {
 public:
  enum class Align { left, right };

  explicit Table(std::vector<std::string> heading = {}, std::vector<Align> align = {})
      : heading_(std::move(heading)), align_(std::move(align)) {}

  void add(std::vector<std::string> row) { rows_.push_back(std::move(row)); }
  bool empty() const { return rows_.empty(); }
  /// Every line starts with `indent` spaces and ends with a line feed; the last column is wrapped
  /// within the page.
  std::string str(std::size_t indent = 2) const;

 private:
  std::vector<std::string> heading_;
  std::vector<Align> align_;
  std::vector<std::vector<std::string>> rows_;
};

/// A number with so many decimals; never "-0.00".
std::string fixed(double value, int decimals);
/// A number with so many significant digits, without exponent where that stays short.
std::string significant(double value, int digits = 3);
/// Value and ends of an interval as three texts with the same number of decimals, chosen so that
/// the interval's width shows two digits. Ends are empty texts when absent.
struct QuantityText {
  std::string value, low, high;
};
QuantityText quantity_text(const Quantity& quantity);

/// One line on stderr that is rewritten in place; silent unless stderr is a terminal.
class ProgressLine {
 public:
  explicit ProgressLine(bool wanted);
  ~ProgressLine() { clear(); }
  ProgressLine(const ProgressLine&) = delete;
  ProgressLine& operator=(const ProgressLine&) = delete;

  /// \param share of the work done, in [0, 1]
  void show(double share, const std::string& what);
  void clear();

 private:
  bool on_terminal_ = false;
  bool drawn_ = false;
};

/// From now on Ctrl-C only raises a flag; a second Ctrl-C ends the program at once.
void catch_interrupts();
/// True once Ctrl-C was pressed. Cheap and safe from any thread.
bool interrupted();

}  // namespace softsill::cli

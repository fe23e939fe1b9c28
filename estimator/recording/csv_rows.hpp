#pragma once

// A table of numbers in text, row by row: comma-separated, one header line, '#' comments.

#include <cstddef>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "estimator/recording/byte_source.hpp"

namespace softsill {

/// Reads the number at the front of [begin, end): optional blanks, optional sign, decimal digits
/// with a point and an exponent. \param[out] value     correctly rounded \param[out] decimals
/// digits after the point, less the exponent: how finely it was written \returns one past the
/// number; nullptr when there is no number
const char* read_number(const char* begin, const char* end, double& value, int& decimals);

class CsvRows {
 public:
  /// Reads up to and including the header line.
  /// \throws Error: no header, a header of numbers, not text
  explicit CsvRows(ByteSource& source);

  const std::vector<std::string>& columns() const { return columns_; }
  /// Line of the header, or after next() of the row just read; the first line is 1.
  std::size_t line() const { return line_; }
  /// "line 12" or "line 12, column current_nA".
  std::string place() const;
  std::string place(std::size_t column) const;

  /// Next row: values.size() == columns().size(). False at the end.
  /// \throws Error: text, nothing, or no finite number where a number belongs; too few or too many
  ///         values; bytes that are not text
  bool next(std::span<double> values);
  /// Content bytes of the lines taken so far.
  std::size_t bytes_taken() const { return bytes_read_ - (end_ - begin_); }
  /// Digits after the point of the first column of the row just read.
  int first_decimals() const { return first_decimals_; }

 private:
  bool next_line(std::string_view& line);
  [[noreturn]] void refuse_field(std::size_t column, const char* at, const char* end) const;
  [[noreturn]] void refuse_nul() const;

  ByteSource& source_;
  std::vector<char> buffer_;
  std::size_t begin_ = 0, end_ = 0;
  std::size_t bytes_read_ = 0;
  bool at_end_ = false;
  std::size_t line_ = 0;
  int first_decimals_ = 0;
  std::vector<std::string> columns_;
};

}  // namespace softsill

#include "estimator/recording/csv_rows.hpp"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <limits>

#include "estimator/recording/shown_text.hpp"
#include "softsill/error.hpp"

namespace softsill {

namespace {

constexpr std::size_t buffer_size = std::size_t{1} << 20;
constexpr std::size_t longest_line = std::size_t{1} << 16;

constexpr double powers_of_ten[] = {1e0,  1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,
                                    1e8,  1e9,  1e10, 1e11, 1e12, 1e13, 1e14, 1e15,
                                    1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22};

bool is_digit(char c) { return c >= '0' && c <= '9'; }
bool is_blank(char c) { return c == ' ' || c == '\t'; }

const char* skip_blanks(const char* at, const char* end) {
  while (at != end && is_blank(*at)) {
    ++at;
  }
  return at;
}

std::string_view trimmed(std::string_view text) {
  while (!text.empty() && is_blank(text.front())) {
    text.remove_prefix(1);
  }
  while (!text.empty() && (is_blank(text.back()) || text.back() == '\r')) {
    text.remove_suffix(1);
  }
  return text;
}

std::string shown(std::string_view text) { return "'" + shown_text(trimmed(text)) + "'"; }

}  // namespace

const char* read_number(const char* begin, const char* end, double& value, int& decimals) {
  const char* at = skip_blanks(begin, end);
  const char* const start = at;
  bool negative = false;
  if (at != end && (*at == '-' || *at == '+')) {
    negative = *at == '-';
    ++at;
  }
  std::uint64_t mantissa = 0;
  const char* const digits = at;
  while (at != end && is_digit(*at)) {
    mantissa = mantissa * 10 + static_cast<std::uint64_t>(*at - '0');
    ++at;
  }
  std::ptrdiff_t count = at - digits;
  decimals = 0;
  if (at != end && *at == '.') {
    const char* const point = ++at;
    while (at != end && is_digit(*at)) {
      mantissa = mantissa * 10 + static_cast<std::uint64_t>(*at - '0');
      ++at;
    }
    decimals = static_cast<int>(at - point);
    count += at - point;
  }
  const bool exponent = at != end && (*at == 'e' || *at == 'E');
  // Whole numbers below 2^53 and powers of ten up to 10^22 are exact doubles, so that one division
  // rounds correctly (Clinger 1990, How to read floating point numbers accurately).
  if (count > 0 && count <= 19 && !exponent && mantissa <= (std::uint64_t{1} << 53)) {
    const double magnitude = static_cast<double>(mantissa) / powers_of_ten[decimals];
    value = negative ? -magnitude : magnitude;
    return at;
  }
  const char* const from = start != end && *start == '+' ? start + 1 : start;
  const auto [stop, error] = std::from_chars(from, end, value);
  if (error == std::errc::result_out_of_range) {
    value = std::numeric_limits<double>::infinity();  // refused as not finite by the caller
    return stop;
  }
  if (error != std::errc{}) {
    return nullptr;
  }
  if (exponent) {
    const char* power_at = at + 1;
    if (power_at != end && *power_at == '+') {
      ++power_at;
    }
    int power = 0;
    if (std::from_chars(power_at, end, power).ec == std::errc{}) {
      decimals -= power;
    }
  }
  return stop;
}

CsvRows::CsvRows(ByteSource& source) : source_(source), buffer_(buffer_size) {
  std::string_view line;
  for (;;) {
    if (!next_line(line)) {
      throw Error(source_.path(), "", "holds no header line",
                  "the first line after comments names the columns");
    }
    if (line_ == 1 && line.substr(0, 3) == "\xef\xbb\xbf") {
      line.remove_prefix(3);
    }
    line = trimmed(line);
    if (!line.empty() && line.front() != '#') {
      break;
    }
  }
  if (std::memchr(line.data(), 0, line.size()) != nullptr) {
    refuse_nul();
  }
  for (std::size_t from = 0; from <= line.size();) {
    const std::size_t comma = std::min(line.find(',', from), line.size());
    std::string_view name = trimmed(line.substr(from, comma - from));
    if (name.size() >= 2 && name.front() == '"' && name.back() == '"') {
      name = name.substr(1, name.size() - 2);
    }
    columns_.emplace_back(name);
    from = comma + 1;
  }
  double number = 0.0;
  int decimals = 0;
  const std::string& first = columns_.front();
  if (read_number(first.data(), first.data() + first.size(), number, decimals) ==
      first.data() + first.size()) {
    throw Error(source_.path(), place(), "starts with numbers instead of a header line",
                "name the columns in the first line, for example time_ms,current_nA");
  }
}

std::string CsvRows::place() const { return "line " + std::to_string(line_); }

std::string CsvRows::place(std::size_t column) const {
  return place() + ", column " + columns_[column];
}

bool CsvRows::next_line(std::string_view& line) {
  std::size_t searched = 0;
  for (;;) {
    const char* const from = buffer_.data() + begin_;
    const void* const found = std::memchr(from + searched, '\n', end_ - begin_ - searched);
    if (found != nullptr) {
      const char* const stop = static_cast<const char*>(found);
      line = std::string_view(from, static_cast<std::size_t>(stop - from));
      begin_ += line.size() + 1;
      ++line_;
      return true;
    }
    searched = end_ - begin_;
    if (searched > longest_line) {
      ++line_;
      if (std::memchr(from, 0, searched) != nullptr) {
        refuse_nul();
      }
      throw Error(source_.path(), place(), "is too long for a table of numbers",
                  "check that the right file is named");
    }
    if (at_end_) {
      if (searched == 0) {
        return false;
      }
      line = std::string_view(from, searched);
      begin_ = end_;
      ++line_;
      return true;
    }
    std::memmove(buffer_.data(), from, searched);
    begin_ = 0;
    end_ = searched;
    const std::size_t got = source_.read(buffer_.data() + end_, buffer_.size() - end_);
    at_end_ = got == 0;
    end_ += got;
    bytes_read_ += got;
  }
}

bool CsvRows::next(std::span<double> values) {
  std::string_view line;
  do {
    if (!next_line(line)) {
      return false;
    }
    if (!line.empty() && line.back() == '\r') {
      line.remove_suffix(1);
    }
  } while (line.empty() || line.front() == '#');

  const char* at = line.data();
  const char* const end = at + line.size();
  if (skip_blanks(at, end) == end) {
    return next(values);
  }
  for (std::size_t column = 0; column < values.size(); ++column) {
    int decimals = 0;
    const char* const stop = read_number(at, end, values[column], decimals);
    const char* const after = stop == nullptr ? nullptr : skip_blanks(stop, end);
    if (after == nullptr || (after != end && *after != ',') || !std::isfinite(values[column])) {
      refuse_field(column, at, end);
    }
    if (column == 0) {
      first_decimals_ = decimals;
    }
    const bool last = column + 1 == values.size();
    if (last != (after == end)) {
      const auto count = 1 + std::count(line.begin(), line.end(), ',');
      throw Error(source_.path(), place(),
                  "has " + std::to_string(count) + (count == 1 ? " value" : " values") +
                      " where the header names " + std::to_string(values.size()),
                  "every row needs one value for each column");
    }
    at = after == end ? end : after + 1;
  }
  return true;
}

void CsvRows::refuse_field(std::size_t column, const char* at, const char* end) const {
  const char* const stop = std::find(at, end, ',');
  if (std::memchr(at, 0, static_cast<std::size_t>(stop - at)) != nullptr) {
    refuse_nul();
  }
  const std::string_view text = trimmed({at, static_cast<std::size_t>(stop - at)});
  if (text.empty()) {
    throw Error(source_.path(), place(column), "holds no value",
                "every row needs one value for each column");
  }
  double value = 0.0;
  int decimals = 0;
  if (read_number(text.data(), text.data() + text.size(), value, decimals) ==
      text.data() + text.size()) {
    throw Error(source_.path(), place(column), shown(text) + " is not a finite number",
                "the signal must be known throughout: end the sweep before the gap");
  }
  throw Error(source_.path(), place(column), shown(text) + " is not a number",
              "write plain decimal numbers with a point, separated by commas");
}

void CsvRows::refuse_nul() const {
  throw Error(source_.path(), place(), "holds NUL bytes, so this is not text",
              "check that the right file is named and was written completely");
}

}  // namespace softsill

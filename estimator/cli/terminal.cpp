#include "estimator/cli/terminal.hpp"

#include <unistd.h>

#include <algorithm>
#include <atomic>
#include <cmath>
#include <csignal>
#include <cstdio>

namespace softsill::cli {
namespace {

std::atomic<bool> interrupt_flag{false};
static_assert(std::atomic<bool>::is_always_lock_free, "a signal handler may only touch these");

void on_interrupt(int) {
  interrupt_flag.store(true);
  // Whoever presses twice wants out now, not at the next look at the flag.
  std::signal(SIGINT, SIG_DFL);
}

std::string padded(const std::string& text, std::size_t width, Table::Align align) {
  const std::size_t used = width_of(text);
  const std::string fill(width > used ? width - used : 0, ' ');
  return align == Table::Align::right ? fill + text : text + fill;
}

}  // namespace

std::size_t width_of(std::string_view text) {
  return static_cast<std::size_t>(std::count_if(text.begin(), text.end(), [](char c) {
    return (static_cast<unsigned char>(c) & 0xC0U) != 0x80U;
  }));
}

std::string wrap(std::string_view text, std::size_t indent, std::size_t first, std::size_t width) {
  std::string out;
  std::size_t column = first;
  bool at_start = true;
  std::size_t position = 0;
  while (position < text.size()) {
    const std::size_t begin = text.find_first_not_of(' ', position);
    if (begin == std::string_view::npos) {
      break;
    }
    const std::size_t end = std::min(text.find(' ', begin), text.size());
    const std::string_view word = text.substr(begin, end - begin);
    const std::size_t room = width_of(word) + (at_start ? 0 : 1);
    if (!at_start && column + room > width) {
      out += '\n' + std::string(indent, ' ');
      column = indent;
      at_start = true;
    }
    if (!at_start) {
      out += ' ';
      ++column;
    }
    out += word;
    column += width_of(word);
    at_start = false;
    position = end;
  }
  return out;
}

std::string Table::str(std::size_t indent) const {
  std::vector<std::size_t> widths;
  const auto measure = [&widths](const std::vector<std::string>& row) {
    widths.resize(std::max(widths.size(), row.size()));
    for (std::size_t c = 0; c < row.size(); ++c) {
      widths[c] = std::max(widths[c], width_of(row[c]));
    }
  };
  measure(heading_);
  std::for_each(rows_.begin(), rows_.end(), measure);

  const auto line = [&](const std::vector<std::string>& row) {
    std::string text(indent, ' ');
    for (std::size_t c = 0; c < row.size(); ++c) {
      const Align align = c < align_.size() ? align_[c] : Align::left;
      if (c + 1 == row.size() && align == Align::left) {
        const std::size_t column = width_of(text);
        text += wrap(row[c], column, column);
      } else {
        text += padded(row[c], widths[c], align);
      }
      text += "  ";
    }
    text.erase(text.find_last_not_of(' ') + 1);
    return text + '\n';
  };
  std::string out;
  if (!heading_.empty()) {
    out += line(heading_);
  }
  for (const std::vector<std::string>& row : rows_) {
    out += line(row);
  }
  return out;
}

std::string fixed(double value, int decimals) {
  char text[64];
  std::snprintf(text, sizeof text, "%.*f", decimals, value);
  // "-0.00" would claim a sign that the digits do not show.
  if (text[0] == '-' && std::string_view(text).find_first_of("123456789") == std::string::npos) {
    return text + 1;
  }
  return text;
}

std::string significant(double value, int digits) {
  if (value == 0.0) {
    return "0";
  }
  const int magnitude = static_cast<int>(std::floor(std::log10(std::abs(value))));
  if (magnitude < -4 || magnitude > 6) {
    char text[64];
    std::snprintf(text, sizeof text, "%.*g", digits, value);
    return text;
  }
  return fixed(value, std::max(0, digits - 1 - magnitude));
}

QuantityText quantity_text(const Quantity& quantity) {
  QuantityText text;
  if (!quantity.value) {
    return text;
  }
  double ruler = std::abs(*quantity.value);
  int digits = 3;
  if (quantity.low && quantity.high && *quantity.high > *quantity.low) {
    ruler = *quantity.high - *quantity.low;
    digits = 2;
  }
  if (ruler == 0.0) {
    ruler = 1.0;
  }
  const int decimals =
      std::clamp(digits - 1 - static_cast<int>(std::floor(std::log10(ruler))), 0, 8);
  text.value = fixed(*quantity.value, decimals);
  if (quantity.low) {
    text.low = fixed(*quantity.low, decimals);
  }
  if (quantity.high) {
    text.high = fixed(*quantity.high, decimals);
  }
  return text;
}

ProgressLine::ProgressLine(bool wanted) : on_terminal_(wanted && isatty(STDERR_FILENO) == 1) {}

void ProgressLine::show(double share, const std::string& what) {
  if (!on_terminal_) {
    return;
  }
  const int percent = static_cast<int>(std::lround(100.0 * std::clamp(share, 0.0, 1.0)));
  const std::string words = width_of(what) > page_width - 8 ? what.substr(0, page_width - 8) : what;
  std::fprintf(stderr, "\r\033[K%3d %%  %s", percent, words.c_str());
  std::fflush(stderr);
  drawn_ = true;
}

void ProgressLine::clear() {
  if (drawn_) {
    std::fprintf(stderr, "\r\033[K");
    std::fflush(stderr);
    drawn_ = false;
  }
}

void catch_interrupts() { std::signal(SIGINT, on_interrupt); }

bool interrupted() { return interrupt_flag.load(); }

}  // namespace softsill::cli

#include <charconv>
#include <cmath>

#include "softsill/error.hpp"
#include "softsill/fit.hpp"

namespace softsill {
namespace {

/// Reads a number at the front of `text` and removes it.
bool take_number(std::string_view& text, double& value) {
  const auto result = std::from_chars(text.data(), text.data() + text.size(), value);
  if (result.ec != std::errc{} || !std::isfinite(value)) {
    return false;
  }
  text.remove_prefix(static_cast<std::size_t>(result.ptr - text.data()));
  return true;
}

bool take(std::string_view& text, std::string_view word) {
  if (!text.starts_with(word)) {
    return false;
  }
  text.remove_prefix(word.size());
  return true;
}

}  // namespace

Anchor parse_anchor(const std::string& text) {
  const Error bad("", "anchor '" + text + "'", "cannot be read",
                  "write resistance=120±8MOhm or noise_level=1.5±0.2mV");
  std::string_view rest = text;
  Anchor anchor;
  if (take(rest, "resistance=")) {
    anchor.what = Anchor::What::resistance;
  } else if (take(rest, "noise_level=")) {
    anchor.what = Anchor::What::noise_level;
  } else {
    throw bad;
  }
  if (!take_number(rest, anchor.value)) {
    throw bad;
  }
  if ((take(rest, "±") || take(rest, "+-")) && !take_number(rest, anchor.standard_error)) {
    throw bad;
  }
  const bool ohm = anchor.what == Anchor::What::resistance;
  if (!(take(rest, ohm ? "MOhm" : "mV") || rest.empty()) || !rest.empty()) {
    throw bad;
  }
  if (anchor.value <= 0.0 || anchor.standard_error < 0.0) {
    throw Error("", "anchor '" + text + "'", "must be positive");
  }
  return anchor;
}

}  // namespace softsill

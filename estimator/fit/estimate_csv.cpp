#include <charconv>
#include <cmath>
#include <optional>
#include <string>

#include "softsill/estimate.hpp"

namespace softsill {
namespace {

/// Shortest text that reads back as the same number; what is not a finite number is left empty.
std::string cell(double value) {
  if (!std::isfinite(value)) {
    return {};
  }
  char text[32];
  const auto end = std::to_chars(text, text + sizeof text, value);
  return {text, end.ptr};
}

std::string cell(const std::optional<double>& value) { return value ? cell(*value) : ""; }

/// Quoted where the text would break the row (RFC 4180).
std::string cell(const std::string& text) {
  if (text.find_first_of(",\"\r\n") == std::string::npos) {
    return text;
  }
  std::string quoted = "\"";
  for (char c : text) {
    quoted += c == '"' ? std::string("\"\"") : std::string(1, c);
  }
  return quoted + "\"";
}

}  // namespace

std::string kernels_csv(const Estimate& estimate) {
  std::string out = "kernel,lag_ms,value,low,high,unit\n";
  for (const KernelCurve& curve : estimate.kernels) {
    for (std::size_t i = 0; i < curve.lag_ms.size(); ++i) {
      out += cell(curve.kernel) + "," + cell(curve.lag_ms[i]) + "," + cell(curve.value[i]) + "," +
             cell(curve.low[i]) + "," + cell(curve.high[i]) + "," + cell(curve.unit) + "\n";
    }
  }
  return out;
}

std::string parameters_csv(const Estimate& estimate) {
  std::string out = "name,value,low,high,unit,method\n";
  for (const auto& [name, quantity] : estimate.parameters) {
    // Why a number is absent belongs into the row: the table is often read without the JSON.
    const std::string method = quantity.value ? quantity.method : "absent: " + quantity.why_absent;
    out += cell(name) + "," + cell(quantity.value) + "," + cell(quantity.low) + "," +
           cell(quantity.high) + "," + cell(quantity.unit) + "," + cell(method) + "\n";
  }
  return out;
}

}  // namespace softsill

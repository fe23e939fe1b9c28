#include <algorithm>
#include <cmath>

#include "softsill/error.hpp"
#include "softsill/kernel.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {
namespace {

/// Smallest integral is where exp(-s / tau) has lost all weight for a lead-in.
constexpr double exponential_reach = 7.0;

bool positive_finite(double value) { return std::isfinite(value) && value > 0.0; }

}  // namespace

std::string_view to_string(KernelFamily family) {
  switch (family) {
    case KernelFamily::absent:
      return "absent";
    case KernelFamily::spline:
      return "spline";
    case KernelFamily::exponentials:
      return "exponentials";
    case KernelFamily::steps:
      return "steps";
  }
  throw InternalError("unknown kernel family");
}

KernelFamily kernel_family_from(const std::string& word) {
  std::vector<std::string> known;
  for (KernelFamily family : {KernelFamily::absent, KernelFamily::spline,
                              KernelFamily::exponentials, KernelFamily::steps}) {
    if (word == to_string(family)) {
      return family;
    }
    known.emplace_back(to_string(family));
  }
  throw Error("", "", "unknown kernel family '" + word + "'",
              "did you mean '" + nearest_word(word, known) + "'?");
}

std::size_t Basis::size() const {
  switch (family) {
    case KernelFamily::absent:
      return 0;
    case KernelFamily::exponentials:
      return time_constants_ms.size();
    case KernelFamily::spline:
    case KernelFamily::steps:
      return knots_ms.size() - static_cast<std::size_t>(degree) - 1;
  }
  return 0;
}

void Basis::values(double lag_ms, std::span<double> out) const {
  if (out.size() != size()) {
    throw InternalError("Basis::values: output has the wrong size");
  }
  std::fill(out.begin(), out.end(), 0.0);
  if (family == KernelFamily::absent || lag_ms < 0.0) {
    return;
  }
  if (family == KernelFamily::exponentials) {
    for (std::size_t j = 0; j < out.size(); ++j) {
      out[j] = std::exp(-lag_ms / time_constants_ms[j]);
    }
    return;
  }
  if (lag_ms >= knots_ms.back() || lag_ms < knots_ms.front()) {
    return;
  }
  // Cox-de Boor recursion on the one knot interval that holds the lag.
  const auto above = std::upper_bound(knots_ms.begin(), knots_ms.end(), lag_ms);
  const auto cell = static_cast<std::ptrdiff_t>(above - knots_ms.begin()) - 1;
  double local[8] = {1.0};
  for (int order = 1; order <= degree; ++order) {
    double carried = 0.0;
    for (int r = 0; r < order; ++r) {
      // Functions that start before the first knot or end after the last are not in the basis;
      // their missing knots never contribute to the ones that are.
      const std::ptrdiff_t right = cell + r + 1, left = cell + r + 1 - order;
      const bool inside = left >= 0 && right < static_cast<std::ptrdiff_t>(knots_ms.size());
      const double share = inside ? local[r] / (knots_ms[static_cast<std::size_t>(right)] -
                                                knots_ms[static_cast<std::size_t>(left)])
                                  : 0.0;
      const double up = inside ? (knots_ms[static_cast<std::size_t>(right)] - lag_ms) * share : 0.0;
      const double next =
          inside ? (lag_ms - knots_ms[static_cast<std::size_t>(left)]) * share : 0.0;
      local[r] = carried + up;
      carried = next;
    }
    local[order] = carried;
  }
  for (int r = 0; r <= degree; ++r) {
    const std::ptrdiff_t index = cell - degree + r;
    if (index >= 0 && index < static_cast<std::ptrdiff_t>(out.size())) {
      out[static_cast<std::size_t>(index)] = local[r];
    }
  }
}

std::vector<double> Basis::integrals() const {
  std::vector<double> total(size(), 0.0);
  if (family == KernelFamily::exponentials) {
    return time_constants_ms;
  }
  if (family == KernelFamily::absent) {
    return total;
  }
  // Three-point Gauss-Legendre on every knot interval is exact up to degree 5.
  const double node = std::sqrt(0.6);
  const double nodes[3] = {-node, 0.0, node}, weights[3] = {5.0 / 9, 8.0 / 9, 5.0 / 9};
  std::vector<double> at(size());
  for (std::size_t i = 0; i + 1 < knots_ms.size(); ++i) {
    const double begin = std::max(0.0, knots_ms[i]), end = knots_ms[i + 1];
    for (int g = 0; g < 3 && end > begin; ++g) {
      values(0.5 * (begin + end) + 0.5 * (end - begin) * nodes[g], at);
      for (std::size_t k = 0; k < at.size(); ++k) {
        total[k] += 0.5 * (end - begin) * weights[g] * at[k];
      }
    }
  }
  return total;
}

Basis Basis::absent() { return Basis{}; }

Basis Basis::spline(double support_ms, double first_ms, int count) {
  if (!positive_finite(support_ms) || !positive_finite(first_ms)) {
    throw Error("", "spline kernel", "support and first lag must be positive");
  }
  if (count < 4) {
    throw Error("", "spline kernel",
                "needs at least 4 basis functions, got " + std::to_string(count));
  }
  Basis basis;
  basis.family = KernelFamily::spline;
  basis.support_ms = support_ms;
  basis.degree = 3;
  const double spacing = std::log1p(support_ms / first_ms) / count;
  for (int i = -basis.degree; i <= count; ++i) {
    basis.knots_ms.push_back(first_ms * std::expm1(spacing * i));
  }
  basis.knots_ms[3] = 0.0;
  basis.knots_ms.back() = support_ms;
  return basis;
}

Basis Basis::steps(std::vector<double> edges_ms) {
  if (edges_ms.size() < 2) {
    throw Error("", "steps kernel", "needs at least two edges");
  }
  for (std::size_t i = 0; i < edges_ms.size(); ++i) {
    if (!std::isfinite(edges_ms[i]) || edges_ms[i] < 0.0 ||
        (i > 0 && edges_ms[i] <= edges_ms[i - 1])) {
      throw Error("", "steps kernel", "edges must be finite, at least 0 and increasing");
    }
  }
  Basis basis;
  basis.family = KernelFamily::steps;
  basis.degree = 0;
  basis.support_ms = edges_ms.back();
  basis.knots_ms = std::move(edges_ms);
  return basis;
}

Basis Basis::exponentials(std::vector<double> time_constants_ms) {
  if (time_constants_ms.empty()) {
    throw Error("", "exponentials kernel", "needs at least one time constant");
  }
  for (double tau : time_constants_ms) {
    if (!positive_finite(tau)) {
      throw Error("", "exponentials kernel", "time constants must be positive and finite");
    }
  }
  Basis basis;
  basis.family = KernelFamily::exponentials;
  basis.support_ms =
      exponential_reach * *std::max_element(time_constants_ms.begin(), time_constants_ms.end());
  basis.time_constants_ms = std::move(time_constants_ms);
  return basis;
}

double Kernel::value(double lag_ms) const {
  std::vector<double> at(basis.size());
  basis.values(lag_ms, at);
  double sum = 0.0;
  for (std::size_t k = 0; k < at.size(); ++k) {
    sum += coefficients[k] * at[k];
  }
  return sum;
}

double Kernel::integral() const {
  const std::vector<double> parts = basis.integrals();
  double sum = 0.0;
  for (std::size_t k = 0; k < parts.size(); ++k) {
    sum += coefficients[k] * parts[k];
  }
  return sum;
}

}  // namespace softsill

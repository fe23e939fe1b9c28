#include "estimator/model/gaussian_hazard.hpp"

#include <array>
#include <cmath>
#include <cstddef>
#include <numbers>

namespace softsill {
namespace {

// Laplace's continued fraction h = x + 1 / (x + 2 / (x + 3 / (x + ...))) has tails
// d_k = k / (x + d_{k+1}), each of which obeys d_k' = d_k (x + d_k) - k. In these tails the
// derivatives of log h carry no cancellation:
//   (log h)'  = d_1,   (log h)'' = h d_1 - 1 = d_1 (d_1 - d_2),
//   h'' / h   = d_1 (2 d_1 - d_2),   2 d_1 - d_2 = d_1 d_2 (d_3 - d_2).
// So d_2 is what is tabulated, for 0 <= x < 8; beyond, the fraction itself is short.

constexpr double table_end = 8.0;
constexpr int pieces_per_unit = 8;
constexpr int degree = 9;
constexpr std::size_t pieces = static_cast<std::size_t>(table_end) * pieces_per_unit;

/// d_2 as Taylor polynomials about the middle of each piece.
class TailTable {
 public:
  TailTable() {
    for (std::size_t i = 0; i < pieces; ++i) {
      const long double centre = (static_cast<long double>(i) + 0.5L) / pieces_per_unit;
      long double a[degree + 1] = {tail_at(centre)};
      for (int j = 0; j < degree; ++j) {
        long double next = centre * a[j] + (j > 0 ? a[j - 1] : -2.0L);
        for (int k = 0; k <= j; ++k) {
          next += a[k] * a[j - k];
        }
        a[j + 1] = next / (j + 1);
      }
      for (std::size_t j = 0; j <= degree; ++j) {
        coefficients_[i][j] = static_cast<double>(a[j]);
      }
    }
  }

  /// d_2 for 0 <= x < table_end.
  double operator()(double x) const {
    const auto piece = static_cast<std::size_t>(x * pieces_per_unit);
    const double t = x - (static_cast<double>(piece) + 0.5) / pieces_per_unit;
    const std::array<double, degree + 1>& a = coefficients_[piece];
    // Even and odd powers apart: two short chains instead of a long one.
    const double tt = t * t;
    const double even = a[0] + tt * (a[2] + tt * (a[4] + tt * (a[6] + tt * a[8])));
    const double odd = a[1] + tt * (a[3] + tt * (a[5] + tt * (a[7] + tt * a[9])));
    return even + t * odd;
  }

 private:
  static long double tail_at(long double x) {
    if (x > 2.0L) {
      long double tail = 0.0L;
      for (int k = 400; k >= 2; --k) {
        tail = k / (x + tail);
      }
      return tail;
    }
    const long double density =
        std::exp(-0.5L * x * x) / std::sqrt(2.0L * std::numbers::pi_v<long double>);
    const long double above = 0.5L * std::erfc(x / std::numbers::sqrt2_v<long double>);
    const long double d_1 = density / above - x;
    return 1.0L / d_1 - x;
  }

  std::array<std::array<double, degree + 1>, pieces> coefficients_;
};

const TailTable& tail_table() {
  static const TailTable table;
  return table;
}

constexpr double log_root_two_pi = 0.91893853320467274178;
constexpr double one_over_root_two_pi = 0.39894228040143267794;

/// d_3 at x >= table_end.
double third_tail(double x) {
  // What is left out is a product of k / x^2 over the levels: below 1e-16 either way.
  double tail = 0.0;
  for (int k = x < 20.0 ? 18 : 10; k >= 3; --k) {
    tail = k / (x + tail);
  }
  return tail;
}

}  // namespace

GaussianHazard gaussian_hazard(double x) {
  GaussianHazard h;
  const double a = std::abs(x);
  double second = 0.0, difference = 0.0;  // d_2 and 2 d_1 - d_2 at a
  double first = 0.0;
  if (a < table_end) {
    second = tail_table()(a);
    first = 1.0 / (a + second);
    difference = 2.0 * first - second;
  } else {
    const double third = third_tail(a);
    second = 2.0 / (a + third);
    first = 1.0 / (a + second);
    difference = first * second * (third - second);
  }
  if (x >= 0.0) {
    h.value = x + first;
    h.log = std::log(h.value);
    h.log_slope = first;
    h.log_curvature = first * (first - second);
    h.curvature = first * difference;
    return h;
  }
  // Phi(-x) = 1 - Phi(-a), and Phi(-a) = phi(a) / h(a).
  const double density = one_over_root_two_pi * std::exp(-0.5 * a * a);
  const double below = density / (a + first);
  h.value = density / (1.0 - below);
  h.log = -0.5 * a * a - log_root_two_pi - std::log1p(-below);
  h.log_slope = h.value + a;
  h.log_curvature = h.value * h.log_slope - 1.0;
  h.curvature = h.log_slope * (h.value + h.log_slope) - 1.0;
  return h;
}

double gaussian_hazard_value(double x) {
  const double a = std::abs(x);
  const double second = a < table_end ? tail_table()(a) : 2.0 / (a + third_tail(a));
  const double at_a = a + 1.0 / (a + second);
  if (x >= 0.0) {
    return at_a;
  }
  const double density = one_over_root_two_pi * std::exp(-0.5 * a * a);
  return density / (1.0 - density / at_a);
}

}  // namespace softsill

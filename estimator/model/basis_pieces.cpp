#include <algorithm>
#include <cmath>

#include "estimator/model/piecewise.hpp"
#include "softsill/error.hpp"

namespace softsill {
namespace {

/// Interpolating polynomial of degree n through samples at equally spaced points of [0, width], in
/// powers of the local lag (n <= 3): exact for the pieces of a B-spline.
std::array<double, 4> polynomial_through(const std::array<double, 4>& samples, double width,
                                         int degree) {
  if (degree == 0) {
    return {samples[0], 0.0, 0.0, 0.0};
  }
  const double h = width / 3.0;
  const double d1 = samples[1] - samples[0];
  const double d2 = samples[2] - 2 * samples[1] + samples[0];
  const double d3 = samples[3] - 3 * samples[2] + 3 * samples[1] - samples[0];
  // Newton's forward form expanded: u = s / h.
  return {samples[0], (d1 - d2 / 2 + d3 / 3) / h, (d2 / 2 - d3 / 2) / (h * h),
          d3 / 6 / (h * h * h)};
}

}  // namespace

TruncatedPowers::TruncatedPowers(const Basis& basis) : degree(basis.degree) {
  const std::vector<double>& all = basis.knots_ms;
  const auto positive =
      static_cast<std::size_t>(std::upper_bound(all.begin(), all.end(), 0.0) - all.begin());
  knots.assign(all.begin() + static_cast<std::ptrdiff_t>(positive), all.end());
  const auto order = static_cast<std::size_t>(degree) + 1;
  const double sign = degree % 2 == 0 ? -1.0 : 1.0;
  for (std::size_t k = 0; k < basis.size(); ++k) {
    Function function;
    function.reach_ms = all[k + order];
    function.first_knot = std::max(k, positive) - positive;
    for (std::size_t j = k; j <= k + order; ++j) {
      double product = 1.0;
      for (std::size_t i = k; i <= k + order; ++i) {
        product *= i == j ? 1.0 : all[j] - all[i];
      }
      // Divided difference of (. - s)_+^degree; since (a)_+^n = a^n + (-1)^(n+1) (-a)_+^n and the
      // polynomial a^n has none of order n + 1, only the (s - knot)_+ terms remain.
      const double weight = sign * (all[k + order] - all[k]) / product;
      if (all[j] > 0.0) {
        function.weights.push_back(weight);
        continue;
      }
      double power = 1.0;
      for (int r = degree; r >= 0; --r) {
        // weight * C(degree, r) s^r (-knot)^(degree - r)
        double binomial = 1.0;
        for (int i = 0; i < degree - r; ++i) {
          binomial = binomial * (degree - i) / (i + 1);
        }
        function.at_zero[static_cast<std::size_t>(r)] += weight * binomial * power;
        power *= -all[j];
      }
    }
    functions.push_back(std::move(function));
  }
}

PolynomialPieces::PolynomialPieces(const Basis& basis) {
  const int degree = basis.degree;
  std::vector<double> at(basis.size());
  double narrowest = basis.support_ms;
  for (std::size_t i = 0; i + 1 < basis.knots_ms.size(); ++i) {
    if (basis.knots_ms[i + 1] <= 0.0) {
      continue;
    }
    Cell cell;
    cell.begin = std::max(0.0, basis.knots_ms[i]);
    cell.end = basis.knots_ms[i + 1];
    const double width = cell.end - cell.begin;
    narrowest = std::min(narrowest, width);
    const std::size_t first = i >= static_cast<std::size_t>(degree)
                                  ? i - static_cast<std::size_t>(degree)
                                  : std::size_t{0};
    cell.first = first;
    cell.count = static_cast<int>(std::min(i, basis.size() - 1) - first) + 1;
    std::array<std::array<double, 4>, 4> samples{};
    for (int s = 0; s <= degree; ++s) {
      // The right end belongs to the next cell; a point just inside is the same polynomial only in
      // the limit, so the last sample is read by continuity (splines of degree > 0 are continuous).
      const double lag = cell.begin + width * (degree > 0 ? s / 3.0 : 0.5);
      basis.values(std::min(lag, cell.end), at);
      for (int r = 0; r < cell.count; ++r) {
        samples[static_cast<std::size_t>(r)][static_cast<std::size_t>(s)] =
            at[first + static_cast<std::size_t>(r)];
      }
    }
    for (int r = 0; r < cell.count; ++r) {
      cell.coefficients[static_cast<std::size_t>(r)] =
          polynomial_through(samples[static_cast<std::size_t>(r)], width, degree);
    }
    cells_.push_back(cell);
  }
  per_ms_ = 1.0 / narrowest;
  const auto slots = static_cast<std::size_t>(std::ceil(support() * per_ms_)) + 2;
  if (slots > 10'000'000) {
    throw Error("", "kernel", "knots are too close together for this support");
  }
  std::size_t cell = 0;
  for (std::size_t slot = 0; slot < slots; ++slot) {
    const double lag = static_cast<double>(slot) / per_ms_;
    while (cell + 1 < cells_.size() && lag >= cells_[cell].end) {
      ++cell;
    }
    lookup_.push_back(cell);
  }
}

}  // namespace softsill

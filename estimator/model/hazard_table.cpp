#include "estimator/model/hazard_table.hpp"

#include <algorithm>
#include <cmath>

namespace softsill {
namespace {

constexpr double negligible_log_rate = -29.933606208922594;  // log(1e-13)
constexpr double lowest = -600.0;
constexpr double top = 16.0;
// Cubic Hermite interpolation of exp(s x) on cells of width d errs by (s d)^4 / 384: 4e-8 here.
constexpr double cells_per_folding = 16.0;

}  // namespace

HazardTable::HazardTable(const Escape& escape, double scale) : escape_(escape), scale_(scale) {
  double low = lowest, high = top;
  if (escape_log_rate(escape, lowest) < negligible_log_rate) {
    for (int i = 0; i < 60; ++i) {
      const double middle = 0.5 * (low + high);
      (escape_log_rate(escape, middle) < negligible_log_rate ? low : high) = middle;
    }
  }
  low_ = std::floor(low);
  // log f is concave: it is steepest at the low end.
  const double steepest = std::max(1.0, escape_at(escape, low_).log_x);
  const double span = std::max(top - low_, 1.0);
  const auto cells =
      static_cast<std::size_t>(std::ceil(std::min(span * cells_per_folding * steepest, 65536.0)));
  cells_ = static_cast<double>(cells);
  per_unit_ = cells_ / span;
  const double width = 1.0 / per_unit_;
  table_.resize(cells);
  EscapeDerivatives left = escape_at(escape, low_);
  for (std::size_t i = 0; i < cells; ++i) {
    const EscapeDerivatives right = escape_at(escape, low_ + static_cast<double>(i + 1) * width);
    const double rise = right.rate - left.rate;
    const double from = left.rate_x * width, to = right.rate_x * width;
    table_[i] = {scale * left.rate, scale * from, scale * (3.0 * rise - 2.0 * from - to),
                 scale * (from + to - 2.0 * rise)};
    left = right;
  }
}

}  // namespace softsill

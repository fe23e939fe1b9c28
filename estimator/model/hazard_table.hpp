#pragma once

/// \file hazard_table.hpp
/// An escape function on a grid, for loops that need its value hundreds of millions of times.

#include <cstddef>
#include <vector>

#include "softsill/escape.hpp"

namespace softsill {

/// lambda(x) times a scale by cubic Hermite interpolation: relative error below 1e-6; 0 where
/// lambda is below 1e-13 per ms; exact above the table. Not for the exponential.
class HazardTable {
 public:
  HazardTable(const Escape& escape, double scale);

  double operator()(double x) const {
    const double place = (x - low_) * per_unit_;
    if (!(place >= 0.0)) {
      return below(x);
    }
    if (place >= cells_) {
      return scale_ * escape_rate(escape_, x);
    }
    const auto cell = static_cast<std::ptrdiff_t>(place);
    const double t = place - static_cast<double>(cell);
    const Cell& c = table_[static_cast<std::size_t>(cell)];
    return c.a + t * (c.b + t * (c.c + t * c.d));
  }

  double low() const { return low_; }
  double high() const { return low_ + cells_ / per_unit_; }

 private:
  struct Cell {
    double a, b, c, d;
  };
  /// 0, or not a number when x is not.
  static double below(double x) { return x - x == 0.0 || x < 0.0 ? 0.0 : x; }

  Escape escape_;
  double scale_, low_ = 0.0, per_unit_ = 1.0, cells_ = 0.0;
  std::vector<Cell> table_;
};

}  // namespace softsill

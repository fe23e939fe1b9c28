#pragma once

/// \file piecewise.hpp
/// Two exact rewritings of a B-spline basis on lags s >= 0, made once per call.

#include <array>
#include <vector>

#include "softsill/kernel.hpp"

namespace softsill {

/// basis_k(s) = sum_r at_zero[k][r] s^r + sum_j weight_j (s - knot_j)_+^degree for s >= 0
/// (truncated powers; de Boor 1978, ch. IX). Knots at or before 0 are folded into at_zero.
struct TruncatedPowers {
  struct Function {
    std::array<double, 4> at_zero{};
    std::size_t first_knot = 0;   ///< index into `knots`
    std::vector<double> weights;  ///< of consecutive knots from first_knot on
    double reach_ms = 0.0;        ///< where the function has ended
  };
  int degree = 0;
  std::vector<double> knots;  ///< the positive ones, ms
  std::vector<Function> functions;

  explicit TruncatedPowers(const Basis& basis);
};

/// The polynomial pieces: inside cell i, basis function first + r is
/// sum_m coefficients[r][m] (s - begin)^m.
class PolynomialPieces {
 public:
  struct Cell {
    double begin = 0.0, end = 0.0;
    std::size_t first = 0;  ///< first basis function that lives here
    int count = 0;          ///< how many do, at most 4
    std::array<std::array<double, 4>, 4> coefficients{};
  };
  explicit PolynomialPieces(const Basis& basis);
  /// The cell that holds a lag in [begin(), support).
  const Cell& at(double lag_ms) const {
    std::size_t cell = lookup_[static_cast<std::size_t>(lag_ms * per_ms_)];
    while (lag_ms >= cells_[cell].end && cell + 1 < cells_.size()) {
      ++cell;
    }
    return cells_[cell];
  }
  double begin() const { return cells_.front().begin; }
  double support() const { return cells_.back().end; }

 private:
  std::vector<Cell> cells_;
  std::vector<std::size_t> lookup_;  ///< first cell that can hold a lag of that slot
  double per_ms_ = 1.0;
};

}  // namespace softsill

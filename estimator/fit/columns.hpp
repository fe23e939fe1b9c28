#pragma once

/// \file columns.hpp
/// Rows of covariates: what multiplies the linear coefficients at a moment in time.

#include <Eigen/Cholesky>
#include <Eigen/Core>
#include <cstddef>
#include <span>
#include <vector>

#include "estimator/fit/exposure.hpp"
#include "softsill/kernel.hpp"

namespace softsill {

using Matrix = Eigen::MatrixXd;
using RowMatrix = Eigen::Matrix<double, Eigen::Dynamic, Eigen::Dynamic, Eigen::RowMajor>;
using Vector = Eigen::VectorXd;

/// One group of columns.
struct ColumnBlock {
  enum class Kind { one, input, history, current };
  Kind kind = Kind::one;
  Basis basis;
  /// Exponentials with free time constants carry, behind the n columns themselves, n columns of
  /// first and n of second derivatives by log tau.
  bool derivatives = false;
  std::size_t first = 0;  ///< index of the block's first column

  std::size_t functions() const;  ///< coefficients the block has
  std::size_t width() const;      ///< columns it takes
};

/// The layout of a row.
struct Columns {
  std::vector<ColumnBlock> blocks;
  std::size_t width = 0;

  void add(ColumnBlock block);
};

/// Rows at sorted times of one sweep; `out` has times_ms.size() rows of columns.width.
/// The block Kind::current holds the driving signal itself at the time (residual series
/// resistance).
void fill_rows(const Columns& columns, const SweepExposure& exposure,
               std::span<const double> times_ms, double* out);

/// The same over several threads; result independent of `threads`.
void fill_rows(const Columns& columns, const SweepExposure& exposure,
               std::span<const double> times_ms, double* out, int threads);

}  // namespace softsill

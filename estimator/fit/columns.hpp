#pragma once

/// \file columns.hpp
/// Rows of covariates: what multiplies the linear coefficients at a moment in time.

#include <Eigen/Cholesky>
#include <Eigen/Core>
#include <cstddef>
#include <span>
#include <vector>

#include "estimator/fit/exposure.hpp"
#include "estimator/model/exponential_responses.hpp"
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

/// Fills rows of one sweep. What a column needs to know of the whole sweep is worked out once.
class RowFiller {
 public:
  /// \param stride doubles from one row to the next, at least columns.width; 0: columns.width
  RowFiller(const Columns& columns, const SweepExposure& exposure, std::size_t stride = 0);

  /// Rows at sorted times; `out` has times_ms.size() rows of `stride` doubles, of which
  /// the first columns.width are written. The block Kind::current
  /// holds the driving signal itself at the time (residual series resistance).
  void fill(std::span<const double> times_ms, double* out) const;
  /// The same over several threads; the result does not depend on `threads`.
  void fill(std::span<const double> times_ms, double* out, int threads) const;

 private:
  void fill_exponentials(const ColumnBlock& block, std::span<const double> times_ms,
                         double* out) const;

  const Columns& columns_;
  const SweepExposure& exposure_;
  std::size_t stride_;
  /// Of input exponentials, per block and time constant.
  std::vector<std::vector<ExponentialCheckpoints>> checkpoints_;
};

}  // namespace softsill

#pragma once

/// \file bench_cell.hpp
/// The cell that all benchmarks use, and its dense rows.

#include <vector>

#include "estimator/fit/columns.hpp"
#include "softsill/recording.hpp"
#include "softsill/variant.hpp"

namespace softsill::bench {

/// A simulated cell: OU current of 3 ms, kappa 100 MOhm and 15 ms, eta and theta_1 of two
/// exponentials each, Delta 1 mV, about 7 Hz, voltage noise 0.4 mV. Plain stepping, fixed seed.
Recording make_cell(double seconds, double step_ms, bool with_voltage);

/// Three spline kernels, 45 coefficients in the spike predictor: eta and theta_1 have supports of
/// their own, so that no two columns say the same.
Variant three_kernels(bool use_voltage);

/// The same spike likelihood on a dense grid, for programs that know rows only.
struct DenseRows {
  RowMatrix rows;
  Vector spike;  ///< 1 in the row that ends with a spike
  double step_ms;
};
DenseRows dense_rows(const Recording& recording, const Variant& variant, double step_ms);

}  // namespace softsill::bench

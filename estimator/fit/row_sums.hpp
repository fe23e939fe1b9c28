#pragma once

/// \file row_sums.hpp
/// The three sums over rows that a likelihood evaluation is made of, on packed rows.
///
/// Each is compiled for plain x86-64 and for AVX2 with FMA and chosen at run time. The two differ
/// in the last bits; for one machine results never depend on threads or on the order of work.

#include <cstddef>
#include <vector>

namespace softsill {

/// Rows are packed `width` wide, a multiple of this, padded with zeros.
constexpr std::size_t row_lane = 8;
constexpr std::size_t padded_width(std::size_t columns) {
  return (columns + row_lane - 1) / row_lane * row_lane;
}

/// x[i] = row_i . beta (beta padded too).
void dot_rows(const double* rows, std::size_t count, std::size_t width, const double* beta,
              double* x);
/// sum += sum_i weight[i] row_i
void add_rows(const double* rows, const double* weight, std::size_t count, std::size_t width,
              double* sum);
/// square += sum_i weight[i] row_i row_i^T, lower triangle in blocks of row_lane columns; `square`
/// is width x width, row-major. `scratch` holds count * width doubles.
void add_squares(const double* rows, const double* weight, std::size_t count, std::size_t width,
                 double* scratch, double* square);

/// Copies the first `columns` doubles of `count` rows, `stride` apart, into padded rows.
void pack_rows(const double* from, std::size_t count, std::size_t columns, std::size_t stride,
               std::size_t width, double* to);

}  // namespace softsill

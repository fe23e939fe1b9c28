#include "estimator/fit/row_sums.hpp"

#include <algorithm>
#include <cstring>

namespace softsill {
namespace {

// The loops are written once over a vector type and compiled twice. An always-inlined body takes on
// the target of the function it is inlined into.
#define SOFTSILL_INLINE inline __attribute__((always_inline))
#if defined(__x86_64__)
#define SOFTSILL_WIDE __attribute__((target("avx2,fma")))
#endif

using Two = double __attribute__((vector_size(16)));
using Four = double __attribute__((vector_size(32)));

template <typename Vec>
constexpr std::size_t lanes = sizeof(Vec) / sizeof(double);

template <typename Vec>
SOFTSILL_INLINE void load(Vec& out, const double* from) {
  std::memcpy(&out, from, sizeof out);
}
template <typename Vec>
SOFTSILL_INLINE void store(double* to, const Vec& value) {
  std::memcpy(to, &value, sizeof value);
}

template <typename Vec>
SOFTSILL_INLINE void dot_body(const double* rows, std::size_t count, std::size_t width,
                              const double* beta, double* x) {
  for (std::size_t i = 0; i < count; ++i) {
    const double* row = rows + i * width;
    Vec even{}, odd{};
    for (std::size_t j = 0; j < width; j += 2 * lanes<Vec>) {
      Vec a, b;
      load(a, row + j);
      load(b, beta + j);
      even += a * b;
      load(a, row + j + lanes<Vec>);
      load(b, beta + j + lanes<Vec>);
      odd += a * b;
    }
    const Vec both = even + odd;
    double sum = 0.0;
    for (std::size_t k = 0; k < lanes<Vec>; ++k) {
      sum += both[k];
    }
    x[i] = sum;
  }
}

template <typename Vec>
SOFTSILL_INLINE void add_body(const double* rows, const double* weight, std::size_t count,
                              std::size_t width, double* sum) {
  for (std::size_t j = 0; j < width; j += 2 * lanes<Vec>) {
    Vec low, high;
    load(low, sum + j);
    load(high, sum + j + lanes<Vec>);
    for (std::size_t i = 0; i < count; ++i) {
      Vec a, b;
      load(a, rows + i * width + j);
      load(b, rows + i * width + j + lanes<Vec>);
      low += weight[i] * a;
      high += weight[i] * b;
    }
    store(sum + j, low);
    store(sum + j + lanes<Vec>, high);
  }
}

/// Tiles of 4 rows by two vectors: the eight accumulators stay in registers over all rows.
template <typename Vec>
SOFTSILL_INLINE void squares_body(const double* rows, const double* weight, std::size_t count,
                                  std::size_t width, double* scratch, double* square) {
  for (std::size_t i = 0; i < count; ++i) {
    for (std::size_t j = 0; j < width; ++j) {
      scratch[i * width + j] = weight[i] * rows[i * width + j];
    }
  }
  constexpr std::size_t tile = 4, wide = 2 * lanes<Vec>;
  for (std::size_t a = 0; a < width; a += tile) {
    for (std::size_t b = 0; b < a + tile; b += wide) {
      Vec s00{}, s01{}, s10{}, s11{}, s20{}, s21{}, s30{}, s31{};
      const double* left = scratch + a;
      const double* right = rows + b;
      for (std::size_t i = 0; i < count; ++i, left += width, right += width) {
        Vec low, high;
        load(low, right);
        load(high, right + lanes<Vec>);
        s00 += left[0] * low;
        s01 += left[0] * high;
        s10 += left[1] * low;
        s11 += left[1] * high;
        s20 += left[2] * low;
        s21 += left[2] * high;
        s30 += left[3] * low;
        s31 += left[3] * high;
      }
      const Vec sums[tile][2] = {{s00, s01}, {s10, s11}, {s20, s21}, {s30, s31}};
      for (std::size_t k = 0; k < tile; ++k) {
        for (std::size_t half = 0; half < 2; ++half) {
          double* to = square + (a + k) * width + b + half * lanes<Vec>;
          Vec old;
          load(old, to);
          store(to, Vec(old + sums[k][half]));
        }
      }
    }
  }
}

#if defined(SOFTSILL_WIDE)
SOFTSILL_WIDE void dot_wide(const double* rows, std::size_t count, std::size_t width,
                            const double* beta, double* x) {
  dot_body<Four>(rows, count, width, beta, x);
}
SOFTSILL_WIDE void add_wide(const double* rows, const double* weight, std::size_t count,
                            std::size_t width, double* sum) {
  add_body<Four>(rows, weight, count, width, sum);
}
SOFTSILL_WIDE void squares_wide(const double* rows, const double* weight, std::size_t count,
                                std::size_t width, double* scratch, double* square) {
  squares_body<Four>(rows, weight, count, width, scratch, square);
}
bool wide() {
  static const bool has = __builtin_cpu_supports("avx2") && __builtin_cpu_supports("fma");
  return has;
}
#endif

}  // namespace

void dot_rows(const double* rows, std::size_t count, std::size_t width, const double* beta,
              double* x) {
#if defined(SOFTSILL_WIDE)
  if (wide()) {
    dot_wide(rows, count, width, beta, x);
    return;
  }
#endif
  dot_body<Two>(rows, count, width, beta, x);
}

void add_rows(const double* rows, const double* weight, std::size_t count, std::size_t width,
              double* sum) {
#if defined(SOFTSILL_WIDE)
  if (wide()) {
    add_wide(rows, weight, count, width, sum);
    return;
  }
#endif
  add_body<Two>(rows, weight, count, width, sum);
}

void add_squares(const double* rows, const double* weight, std::size_t count, std::size_t width,
                 double* scratch, double* square) {
#if defined(SOFTSILL_WIDE)
  if (wide()) {
    squares_wide(rows, weight, count, width, scratch, square);
    return;
  }
#endif
  squares_body<Two>(rows, weight, count, width, scratch, square);
}

void pack_rows(const double* from, std::size_t count, std::size_t columns, std::size_t stride,
               std::size_t width, double* to) {
  for (std::size_t i = 0; i < count; ++i) {
    std::copy_n(from + i * stride, columns, to + i * width);
    std::fill(to + i * width + columns, to + (i + 1) * width, 0.0);
  }
}

}  // namespace softsill

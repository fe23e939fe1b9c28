#pragma once

/// \file steady_exp.hpp
/// exp() by additions, multiplications and shifts alone: compilers turn loops over it into vector
/// code, and it gives the same bits on every IEEE machine, which the mathematics library does not.

#include <bit>
#include <cstdint>

namespace softsill {

/// exp(x) with relative error below 4e-16 for |x| <= 700; beyond, the value at the nearer end.
inline double steady_exp(double x) {
  x = x < -700.0 ? -700.0 : x;
  x = x > 700.0 ? 700.0 : x;
  // x = k log 2 + r with |r| <= log(2) / 2. Adding 1.5 * 2^52 rounds to a whole number, which then
  // stands in the low bits.
  constexpr double whole = 0x1.8p52;
  constexpr double log2_high = 0x1.62e42fefa0000p-1, log2_low = 0x1.cf79abc9e3b3ap-40;
  const double shifted = x * 1.4426950408889634074 + whole;
  const double k = shifted - whole;
  const double r = (x - k * log2_high) - k * log2_low;
  // Taylor polynomial of degree 13: the next term is below 5e-18.
  const double r2 = r * r, r4 = r2 * r2, r8 = r4 * r4;
  const double p01 = 1.0 + r;
  const double p23 = 1.0 / 2 + r * (1.0 / 6);
  const double p45 = 1.0 / 24 + r * (1.0 / 120);
  const double p67 = 1.0 / 720 + r * (1.0 / 5040);
  const double p89 = 1.0 / 40320 + r * (1.0 / 362880);
  const double pab = 1.0 / 3628800 + r * (1.0 / 39916800);
  const double pcd = 1.0 / 479001600 + r * (1.0 / 6227020800);
  const double p = (p01 + r2 * p23) + r4 * (p45 + r2 * p67) + r8 * ((p89 + r2 * pab) + r4 * pcd);
  const auto scale = std::bit_cast<std::uint64_t>(shifted) << 52;
  return std::bit_cast<double>(std::bit_cast<std::uint64_t>(p) + scale);
}

}  // namespace softsill

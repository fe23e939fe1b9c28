#pragma once

/// \file random.hpp
/// Counter-based random numbers: the n-th number of a stream is a pure function of (seed, stream,
/// n), so results do not depend on the number of threads or on the order of work.

#include <array>
#include <cstdint>

namespace softsill {

/// Philox4x32-10 (Salmon, Moraes, Dror & Shaw 2011, SC'11, "Parallel random numbers: as easy as
/// 1, 2, 3"): four 32-bit outputs from a 128-bit counter and a 64-bit key.
std::array<std::uint32_t, 4> philox4x32_10(std::array<std::uint32_t, 4> counter,
                                           std::array<std::uint32_t, 2> key);

/// One stream of a seed. Streams with different (seed, stream) are independent. Copyable; usable as
/// a UniformRandomBitGenerator with the standard distributions.
class RandomStream {
 public:
  using result_type = std::uint64_t;

  /// \param seed   what is printed for the user
  /// \param stream index of the trial, replicate, ... that owns the stream
  RandomStream(std::uint64_t seed, std::uint64_t stream);

  static constexpr result_type min() { return 0; }
  static constexpr result_type max() { return ~result_type{0}; }
  result_type operator()();

  /// Uniform on the open interval (0, 1), 53 bits.
  double uniform();
  /// Standard exponential variate.
  double exponential();
  /// Standard normal variate (Box & Muller 1958).
  double normal();
  /// Uniform integer in [0, n), unbiased (Lemire 2019); n > 0.
  std::uint64_t below(std::uint64_t n);

 private:
  std::array<std::uint32_t, 4> counter_{};
  std::array<std::uint32_t, 2> key_{};
  std::array<std::uint32_t, 4> block_{};
  int used_ = 4;
  bool has_spare_ = false;
  double spare_ = 0.0;
};

}  // namespace softsill

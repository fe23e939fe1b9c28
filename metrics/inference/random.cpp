#include "softsill/random.hpp"

#include <cmath>
#include <numbers>

#include "softsill/error.hpp"

namespace softsill {
namespace {

// Constants of Philox4x32 (Salmon et al. 2011): multipliers, and the Weyl increments of the key
// (golden ratio and sqrt(3) - 1 as 32-bit fractions).
constexpr std::uint32_t multiplier_0 = 0xD2511F53u, multiplier_1 = 0xCD9E8D57u;
constexpr std::uint32_t weyl_0 = 0x9E3779B9u, weyl_1 = 0xBB67AE85u;

__extension__ using Wide = unsigned __int128;

}  // namespace

std::array<std::uint32_t, 4> philox4x32_10(std::array<std::uint32_t, 4> counter,
                                           std::array<std::uint32_t, 2> key) {
  for (int round = 0; round < 10; ++round) {
    const std::uint64_t p0 = std::uint64_t{multiplier_0} * counter[0];
    const std::uint64_t p1 = std::uint64_t{multiplier_1} * counter[2];
    counter = {
        static_cast<std::uint32_t>(p1 >> 32) ^ counter[1] ^ key[0], static_cast<std::uint32_t>(p1),
        static_cast<std::uint32_t>(p0 >> 32) ^ counter[3] ^ key[1], static_cast<std::uint32_t>(p0)};
    key[0] += weyl_0;
    key[1] += weyl_1;
  }
  return counter;
}

RandomStream::RandomStream(std::uint64_t seed, std::uint64_t stream)
    : counter_{0, 0, static_cast<std::uint32_t>(stream), static_cast<std::uint32_t>(stream >> 32)},
      key_{static_cast<std::uint32_t>(seed), static_cast<std::uint32_t>(seed >> 32)} {}

RandomStream::result_type RandomStream::operator()() {
  if (used_ == 4) {
    block_ = philox4x32_10(counter_, key_);
    if (++counter_[0] == 0) {
      ++counter_[1];
    }
    used_ = 0;
  }
  const auto index = static_cast<std::size_t>(used_);
  used_ += 2;
  return block_[index] | (std::uint64_t{block_[index + 1]} << 32);
}

double RandomStream::uniform() {
  // Odd multiples of 2^-53: neither end can be hit, and nothing is rounded.
  return (static_cast<double>((*this)() >> 12) + 0.5) * 0x1p-52;
}

double RandomStream::exponential() { return -std::log(uniform()); }

double RandomStream::normal() {
  if (has_spare_) {
    has_spare_ = false;
    return spare_;
  }
  const double radius = std::sqrt(2.0 * exponential());
  const double angle = 2.0 * std::numbers::pi * uniform();
  spare_ = radius * std::sin(angle);
  has_spare_ = true;
  return radius * std::cos(angle);
}

std::uint64_t RandomStream::below(std::uint64_t n) {
  if (n == 0) {
    throw InternalError("RandomStream::below: n must be positive");
  }
  Wide product = static_cast<Wide>((*this)()) * n;
  if (static_cast<std::uint64_t>(product) < n) {
    // Of 2^64 values the first 2^64 mod n would be hit once too often.
    const std::uint64_t surplus = (0 - n) % n;
    while (static_cast<std::uint64_t>(product) < surplus) {
      product = static_cast<Wide>((*this)()) * n;
    }
  }
  return static_cast<std::uint64_t>(product >> 64);
}

}  // namespace softsill

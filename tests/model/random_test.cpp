// Counter-based random numbers: known answers, and laws at fixed seeds.
#include <gtest/gtest.h>

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>
#include <random>
#include <set>
#include <vector>

#include "softsill/error.hpp"
#include "softsill/random.hpp"
#include "tests/model/kolmogorov.hpp"

namespace softsill {
namespace {

using Counter = std::array<std::uint32_t, 4>;
using Key = std::array<std::uint32_t, 2>;

// Known answers that Salmon et al. (2011) ship with their reference code (from memory).
TEST(Philox, KnownAnswers) {
  struct Row {
    Counter counter;
    Key key;
    Counter expected;
  };
  const Row rows[] = {{{0, 0, 0, 0}, {0, 0}, {0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8}},
                      {{0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff},
                       {0xffffffff, 0xffffffff},
                       {0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd}},
                      {{0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344},
                       {0xa4093822, 0x299f31d0},
                       {0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1}}};
  for (const Row& row : rows) {
    EXPECT_EQ(philox4x32_10(row.counter, row.key), row.expected);
  }
}

// The stream is the documented function of (seed, stream, n) and of nothing else.
TEST(RandomStream, IsAPureFunctionOfSeedStreamAndPlace) {
  const std::uint64_t seed = 0x0123456789abcdefULL, stream = 0xfedcba9876543210ULL;
  RandomStream random(seed, stream);
  for (std::uint32_t block = 0; block < 5; ++block) {
    const Counter out =
        philox4x32_10({block, 0, 0x76543210u, 0xfedcba98u}, {0x89abcdefu, 0x01234567u});
    EXPECT_EQ(random(), out[0] | (std::uint64_t{out[1]} << 32));
    EXPECT_EQ(random(), out[2] | (std::uint64_t{out[3]} << 32));
  }
}

TEST(RandomStream, CopiesContinueAlike) {
  RandomStream a(3, 4);
  a.normal();  // leaves a spare behind
  RandomStream b = a;
  for (int i = 0; i < 20; ++i) {
    EXPECT_EQ(a.normal(), b.normal());
    EXPECT_EQ(a(), b());
  }
}

TEST(RandomStream, SeedsAndStreamsDiffer) {
  std::set<std::uint64_t> seen;
  for (std::uint64_t seed : {0ULL, 1ULL, 2ULL, 1ULL << 32, ~0ULL}) {
    for (std::uint64_t stream : {0ULL, 1ULL, 2ULL, 1ULL << 32, ~0ULL}) {
      RandomStream random(seed, stream);
      for (int i = 0; i < 100; ++i) {
        seen.insert(random());
      }
    }
  }
  EXPECT_EQ(seen.size(), 25u * 100u);
}

class Laws : public ::testing::TestWithParam<std::uint64_t> {};

TEST_P(Laws, UniformExponentialNormal) {
  constexpr std::size_t n = 100000;
  RandomStream random(GetParam(), 17);
  std::vector<double> u(n), e(n), z(n);
  for (std::size_t i = 0; i < n; ++i) {
    u[i] = random.uniform();
    e[i] = random.exponential();
    z[i] = random.normal();
  }
  EXPECT_LT(kolmogorov(u, [](double x) { return x; }), kolmogorov_limit);
  EXPECT_LT(kolmogorov(e, [](double x) { return -std::expm1(-x); }), kolmogorov_limit);
  EXPECT_LT(kolmogorov(z, [](double x) { return 0.5 * std::erfc(-x / std::numbers::sqrt2); }),
            kolmogorov_limit);
  // Neighbours are uncorrelated: sqrt(n) r is standard normal.
  double product = 0.0;
  for (std::size_t i = 0; i + 1 < n; ++i) {
    product += z[i] * z[i + 1];
  }
  EXPECT_LT(std::abs(product / std::sqrt(static_cast<double>(n))), 3.3);
  EXPECT_GT(*std::min_element(u.begin(), u.end()), 0.0);
  EXPECT_LT(*std::max_element(u.begin(), u.end()), 1.0);
}

// Neighbouring streams of one seed, read in turn, look like one stream.
TEST_P(Laws, NeighbouringStreamsAreUncorrelated) {
  constexpr std::size_t n = 50000;
  double product = 0.0;
  for (std::uint64_t stream = 0; stream < n; ++stream) {
    RandomStream a(GetParam(), stream), b(GetParam(), stream + 1);
    product += a.normal() * b.normal();
  }
  EXPECT_LT(std::abs(product / std::sqrt(static_cast<double>(n))), 3.3);
}

TEST_P(Laws, IntegersBelowAreUniform) {
  for (std::uint64_t n : {1ULL, 2ULL, 7ULL, 10ULL, 100ULL}) {
    RandomStream random(GetParam(), n);
    std::vector<double> count(n, 0.0);
    constexpr double draws = 100000.0;
    for (int i = 0; i < 100000; ++i) {
      const std::uint64_t value = random.below(n);
      ASSERT_LT(value, n);
      count[value] += 1.0;
    }
    double chi_square = 0.0;
    const double expected = draws / static_cast<double>(n);
    for (double c : count) {
      chi_square += (c - expected) * (c - expected) / expected;
    }
    // Wilson & Hilferty (1931) normal approximation of the chi-square law.
    const double df = static_cast<double>(n - 1);
    if (df > 0.0) {
      const double v = 2.0 / (9.0 * df);
      EXPECT_LT((std::cbrt(chi_square / df) - (1.0 - v)) / std::sqrt(v), 3.3) << "n = " << n;
    } else {
      EXPECT_EQ(chi_square, 0.0);
    }
  }
}

INSTANTIATE_TEST_SUITE_P(Seeds, Laws, ::testing::Values(1u, 2u, 20261201u));

// Near 2^64 a plain remainder would prefer small values three to one.
TEST(RandomStream, BelowIsUnbiasedForHugeRanges) {
  const std::uint64_t n = (std::uint64_t{1} << 63) + (std::uint64_t{1} << 62);
  RandomStream random(5, 0);
  int low = 0;
  constexpr int draws = 30000;
  for (int i = 0; i < draws; ++i) {
    low += random.below(n) < n / 3 ? 1 : 0;
  }
  EXPECT_NEAR(low, draws / 3.0, 3.3 * std::sqrt(draws * 2.0 / 9.0));
  EXPECT_THROW(random.below(0), InternalError);
}

TEST(RandomStream, ServesTheStandardDistributions) {
  RandomStream random(11, 0);
  std::uniform_int_distribution<int> die(1, 6);
  double sum = 0.0;
  for (int i = 0; i < 60000; ++i) {
    sum += die(random);
  }
  EXPECT_NEAR(sum / 60000.0, 3.5, 3.3 * std::sqrt(35.0 / 12.0 / 60000.0));
}

}  // namespace
}  // namespace softsill

// The coincidence factor: closed forms, hand-worked trains, Poisson means of each counting rule.
#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "softsill/metrics/coincidence.hpp"
#include "softsill/metrics/pairs.hpp"
#include "tests/metrics/poisson_trains.hpp"

namespace softsill::metrics {
namespace {

CoincidenceSettings with(double window_ms, CountingRule rule = CountingRule::one_to_one) {
  CoincidenceSettings settings;
  settings.window_ms = window_ms;
  settings.rule = rule;
  return settings;
}

std::vector<double> regular(double period, double length, double phase) {
  std::vector<double> train;
  for (double t = phase; t < length; t += period) {
    train.push_back(t);
  }
  return train;
}

const Window second{0.0, 1000.0};

TEST(Coincidence, OfATrainWithItselfIsOne) {
  RandomStream random(1, 0);
  for (double rate : {1.0, 10.0, 40.0, 90.0}) {
    const std::vector<double> train = poisson_train(rate, 1000.0, random);
    if (!train.empty()) {
      EXPECT_NEAR(*coincidence_factor(train, train, second).gamma, 1.0, 1e-12) << rate;
    }
  }
}

// Equal counts, no coincidence: -2 nu D / (1 - 2 nu D); 10 Hz and 2 ms: -0.04 / 0.96.
TEST(Coincidence, WithoutAnyIsNegative) {
  const auto a = regular(100.0, 1000.0, 10.0), b = regular(100.0, 1000.0, 60.0);
  EXPECT_NEAR(*coincidence_factor(a, b, second, with(2.0)).gamma, -0.0416667, 1e-7);
}

// Every second spike lost: C = 5, N = 10 and 5 in 1 s. nu = 5 Hz, chance share 2 * 0.005 * 2 =
// 0.02, chance 0.2; (5 - 0.2) / 7.5 / 0.98 = 0.653061. Roles exchanged: share 0.04, chance 0.2, 4.8
// / 7.5 / 0.96 = 0.666667.
TEST(Coincidence, IsNotSymmetric) {
  const auto a = regular(100.0, 1000.0, 10.0), b = regular(200.0, 1000.0, 10.0);
  EXPECT_NEAR(*coincidence_factor(a, b, second, with(2.0)).gamma, 0.653061, 1e-6);
  EXPECT_NEAR(*coincidence_factor(b, a, second, with(2.0)).gamma, 0.666667, 1e-6);
}

// {10, 20} against {11, 12, 16}, D = 4: pairs 10-11, 10-12, 20-16: 3 pairs, 2 reference spikes with
// a partner, one-to-one 2.
TEST(Coincidence, CountsByTheRuleAsked) {
  const std::vector<double> a{10.0, 20.0}, b{11.0, 12.0, 16.0};
  EXPECT_EQ(count_coincidences(a, b, 4.0, CountingRule::pairs), 3.0);
  EXPECT_EQ(count_coincidences(a, b, 4.0, CountingRule::at_least_one), 2.0);
  EXPECT_EQ(count_coincidences(a, b, 4.0, CountingRule::one_to_one), 2.0);
  // A burst against one spike: the one spike is used once.
  const std::vector<double> one{11.5};
  EXPECT_EQ(count_coincidences(one, b, 4.0, CountingRule::one_to_one), 1.0);
  EXPECT_EQ(count_coincidences(one, b, 4.0, CountingRule::pairs), 2.0);
}

// 0.3 - 0.1 is not 0.2 in binary; on a sampling grid the edge of the window must not flicker.
TEST(Coincidence, WindowEdgeIsInsideOnASamplingGrid) {
  for (int i = 0; i < 1000; ++i) {
    const std::vector<double> a{0.1 * i}, b{0.1 * i + 4.0}, beyond{0.1 * (i + 41)};
    EXPECT_EQ(count_coincidences(a, b, 4.0, CountingRule::one_to_one), 1.0);
    EXPECT_EQ(count_coincidences(a, beyond, 4.0, CountingRule::one_to_one), 0.0);
  }
}

// In time order is as good as any one-to-one pairing: against the best of all pairings, by brute
// force over which spike of b each spike of a takes.
double best_pairing(const std::vector<double>& a, const std::vector<double>& b, double window,
                    std::size_t i, unsigned used) {
  if (i == a.size()) {
    return 0.0;
  }
  double best = best_pairing(a, b, window, i + 1, used);
  for (std::size_t j = 0; j < b.size(); ++j) {
    if (!(used >> j & 1u) && std::abs(a[i] - b[j]) <= window) {
      best = std::max(best, 1.0 + best_pairing(a, b, window, i + 1, used | 1u << j));
    }
  }
  return best;
}

TEST(Coincidence, NoPairingBeatsTimeOrder) {
  RandomStream random(5, 0);
  for (int round = 0; round < 300; ++round) {
    auto a = poisson_train(100.0, 60.0, random), b = poisson_train(100.0, 60.0, random);
    a.resize(std::min<std::size_t>(a.size(), 6));
    b.resize(std::min<std::size_t>(b.size(), 6));
    EXPECT_EQ(count_coincidences(a, b, 6.0, CountingRule::one_to_one),
              best_pairing(a, b, 6.0, 0, 0));
  }
}

// Well separated spikes, one train jittered by N(0, s): Gamma = (p - 2 nu D) / (1 - 2 nu D) with
// p = erf(D / (s sqrt 2)) = 0.6826895 at D = s = 2 ms; 10 Hz: 0.669468. z-test at 1e-4.
TEST(Coincidence, OfJitteredSpikesHasItsMean) {
  RandomStream random(11, 0);
  const std::size_t n = 20000;
  const Window window{0.0, 100.0 * n};
  std::vector<double> a, b;
  for (std::size_t i = 0; i < n; ++i) {
    a.push_back(100.0 * static_cast<double>(i) + 50.0);
    b.push_back(a.back() + 2.0 * random.normal());
  }
  const double p = std::erf(1.0 / std::numbers::sqrt2);
  const double error = std::sqrt(p * (1.0 - p) / n) / 0.96;
  EXPECT_NEAR(*coincidence_factor(a, b, window, with(2.0)).gamma, 0.669468, 3.89 * error);
}

// Means of Gamma for independent Poisson trains of 100 s. Pairs: 0. At least one:
// ((1 - exp(-2 nu D)) - 2 nu D) / (1 - 2 nu D). One-to-one: simulated elsewhere with 1500 pairs
// (standard error at most 0.0003). z-tests at 1e-4 (3.89 standard errors).
TEST(Coincidence, OfPoissonTrainsHasTheMeanOfItsRule) {
  struct Row {
    double rate_hz, window_ms, one_to_one;
  };
  for (const Row& row : {Row{10.0, 2.0, -0.0016}, Row{10.0, 4.0, -0.0062}, Row{40.0, 2.0, -0.0262},
                         Row{40.0, 4.0, -0.1143}}) {
    const double share = 2e-3 * row.rate_hz * row.window_ms;
    const double at_least_one = (-std::expm1(-share) - share) / (1.0 - share);
    const std::pair<CountingRule, double> rules[] = {{CountingRule::pairs, 0.0},
                                                     {CountingRule::at_least_one, at_least_one},
                                                     {CountingRule::one_to_one, row.one_to_one}};
    const int rounds = 1500;
    double sums[3] = {}, squares[3] = {};
    for (int round = 0; round < rounds; ++round) {
      RandomStream random(21, static_cast<std::uint64_t>(round));
      const auto a = poisson_train(row.rate_hz, 1e5, random);
      const auto b = poisson_train(row.rate_hz, 1e5, random);
      for (int k = 0; k < 3; ++k) {
        const double gamma =
            *coincidence_factor(a, b, {0.0, 1e5}, with(row.window_ms, rules[k].first)).gamma;
        sums[k] += gamma;
        squares[k] += gamma * gamma;
      }
    }
    for (int k = 0; k < 3; ++k) {
      const double mean = sums[k] / rounds;
      const double error = std::sqrt((squares[k] / rounds - mean * mean) / (rounds - 1));
      // The closed forms hold for long records: pairs near the ends have fewer partners, and the
      // count in the denominators varies. Both are below 1e-3 / sqrt(rate * T), a tenth of `error`.
      const double known = k == 2 ? 0.0003 : 0.0;
      EXPECT_NEAR(mean, rules[k].second, 3.89 * std::hypot(error, known))
          << row.rate_hz << " Hz, " << row.window_ms << " ms, rule " << k;
    }
  }
}

// The simulated chance term takes the bias of one-to-one counting away.
TEST(Coincidence, SimulatedChanceRemovesTheBiasOfOneToOneCounting) {
  CoincidenceSettings settings = with(4.0);
  settings.chance = ChanceTerm::simulated;
  settings.chance_draws = 100;
  const int rounds = 200;
  double sum = 0.0, squares = 0.0;
  for (int round = 0; round < rounds; ++round) {
    RandomStream random(31, static_cast<std::uint64_t>(round));
    const auto a = poisson_train(40.0, 1e4, random), b = poisson_train(40.0, 1e4, random);
    settings.seed = static_cast<std::uint64_t>(round);
    const double gamma = *coincidence_factor(a, b, {0.0, 1e4}, settings).gamma;
    sum += gamma;
    squares += gamma * gamma;
  }
  const double mean = sum / rounds;
  const double error = std::sqrt((squares / rounds - mean * mean) / (rounds - 1));
  EXPECT_NEAR(mean, 0.0, 3.89 * error);
  EXPECT_LT(error, 0.02);
}

TEST(Coincidence, IsAbsentWithAReason) {
  const std::vector<double> none, dense = regular(4.0, 1000.0, 1.0), one{5.0};
  EXPECT_FALSE(coincidence_factor(none, none, second).gamma);
  EXPECT_EQ(coincidence_factor(none, none, second).absence, "both trains are empty");
  const Coincidence crowded = coincidence_factor(one, dense, second);  // 2 * 0.25 * 4 = 2 >= 1
  EXPECT_FALSE(crowded.gamma);
  EXPECT_NE(crowded.absence.find("2 nu D >= 1"), std::string::npos);
  EXPECT_EQ(*coincidence_factor(none, one, second).gamma, 0.0);
  EXPECT_EQ(*coincidence_factor(one, none, second).gamma, 0.0);
}

TEST(Coincidence, NamesItsConvention) {
  EXPECT_EQ(
      describe(with(4.0)),
      "+-4 ms, one-to-one in time order, chance 2 nu D N_reference with nu the predicted rate");
  EXPECT_NE(describe(with(2.5, CountingRule::pairs)).find("+-2.5 ms, every pair counts"),
            std::string::npos);
}

TEST(Coincidence, ShiftOfBothTrainsChangesNothing) {
  RandomStream random(41, 0);
  const auto a = poisson_train(30.0, 1000.0, random), b = poisson_train(30.0, 1000.0, random);
  auto c = a, d = b;
  for (auto* train : {&c, &d}) {
    for (double& t : *train) {
      t += 256.0;
    }
  }
  EXPECT_NEAR(*coincidence_factor(a, b, second).gamma,
              *coincidence_factor(c, d, {256.0, 1256.0}).gamma, 1e-12);
}

}  // namespace
}  // namespace softsill::metrics

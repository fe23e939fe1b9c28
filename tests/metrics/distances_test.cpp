// Distances and similarities of two trains: hand-worked examples, closed forms, properties.
#include <gtest/gtest.h>

#include <cmath>
#include <functional>
#include <limits>
#include <numbers>

#include "softsill/metrics/distances.hpp"
#include "softsill/metrics/pairs.hpp"
#include "tests/metrics/poisson_trains.hpp"

namespace softsill::metrics {
namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();
using Times = std::vector<double>;
const Times none, a{10.0, 20.0, 30.0}, b{11.0, 19.0, 35.0}, short_b{11.0, 19.0};
const Window ten{0.0, 10.0};

// A = {10, 20, 30}, B = {11, 19, 35} ms: moves of 1, 1 and 5 ms cost 7 q; a pair is worth moving
// while q d < 2. q = 0.4/ms: 2.8; q = 0.5: 1 + 2 (delete and insert) = 3; q = 1: 2 + 2 = 4;
// above 2/ms nothing moves: 6.
TEST(VictorPurpura, HandWorked) {
  const std::pair<double, double> rows[] = {{0.0, 0.0}, {0.1, 0.7}, {0.2, 1.4}, {0.4, 2.8},
                                            {0.5, 3.0}, {1.0, 4.0}, {2.1, 6.0}, {infinity, 6.0}};
  for (const auto& [per_ms, cost] : rows) {
    EXPECT_NEAR(victor_purpura(a, b, 1000.0 * per_ms), cost, 1e-12) << per_ms;
  }
  // Against {11, 19} one spike must go: 1 + 2 q until q = 2.
  const std::pair<double, double> fewer[] = {{0.0, 1.0}, {0.1, 1.2}, {0.2, 1.4},
                                             {0.5, 2.0}, {1.0, 3.0}, {10.0, 5.0}};
  for (const auto& [per_ms, cost] : fewer) {
    EXPECT_NEAR(victor_purpura(a, short_b, 1000.0 * per_ms), cost, 1e-12) << per_ms;
  }
}

TEST(VictorPurpura, OneSpikeEachAndLimits) {
  for (const double gap : {0.0, 0.5, 3.0, 25.0}) {
    EXPECT_NEAR(victor_purpura(Times{50.0}, Times{50.0 + gap}, 100.0), std::min(2.0, 0.1 * gap),
                1e-12);
  }
  EXPECT_EQ(victor_purpura(none, a, 200.0), 3.0);
  EXPECT_EQ(victor_purpura(none, none, 200.0), 0.0);
  EXPECT_EQ(victor_purpura_normalised(none, none, 200.0), 0.0);
  EXPECT_NEAR(victor_purpura_normalised(a, b, 500.0), 0.5, 1e-12);
  // Two common times of three and four: 3 + 4 - 2 * 2.
  EXPECT_EQ(victor_purpura(Times{1.0, 2.0, 3.0}, Times{1.0, 2.5, 3.0, 9.0}, infinity), 3.0);
}

// The full table, as published.
double full_table(const Times& x, const Times& y, double q) {
  std::vector<std::vector<double>> g(x.size() + 1, std::vector<double>(y.size() + 1));
  for (std::size_t i = 0; i <= x.size(); ++i) {
    for (std::size_t j = 0; j <= y.size(); ++j) {
      if (i == 0 || j == 0) {
        g[i][j] = static_cast<double>(i + j);
      } else {
        g[i][j] = std::min({g[i - 1][j] + 1.0, g[i][j - 1] + 1.0,
                            g[i - 1][j - 1] + q * std::abs(x[i - 1] - y[j - 1])});
      }
    }
  }
  return g[x.size()][y.size()];
}

TEST(VictorPurpura, BandedEqualsTheFullTable) {
  RandomStream random(1, 0);
  for (int round = 0; round < 200; ++round) {
    const Times x = poisson_train(5.0 + round, 1000.0, random);
    const Times y = poisson_train(100.0, 1000.0, random);
    for (const double q : {0.0, 1.0, 20.0, 200.0, 3000.0}) {
      EXPECT_NEAR(victor_purpura(x, y, q), full_table(x, y, 1e-3 * q), 1e-9);
    }
  }
}

// Pair at distance d: D^2 = 1/2 + 1/2 - exp(-d / tau).
TEST(VanRossum, ClosedForms) {
  const std::pair<double, double> rows[] = {{0.1, 0.0951626},
                                            {0.5, 0.3934693},
                                            {std::numbers::ln2, 0.5},
                                            {1.0, 0.6321206},
                                            {2.0, 0.8646647}};
  for (const auto& [gap, squared] : rows) {
    EXPECT_NEAR(van_rossum_squared(Times{30.0}, Times{30.0 + 10.0 * gap}, 10.0), squared, 1e-7);
  }
  EXPECT_NEAR(van_rossum_squared(Times{30.0}, none, 10.0), 0.5, 1e-12);
  EXPECT_EQ(van_rossum_squared(none, none, 10.0), 0.0);
  // A, B of the Victor-Purpura example. tau = 10 ms by hand: self sums
  // A: 3 + 2 (2 e^-1 + e^-2) = 4.742188, B: 3 + 2 (e^-.8 + e^-1.6 + e^-2.4) = 4.483887, cross:
  // e^-.1 + e^-.9 + e^-2.5 + e^-.9 + e^-.1 + e^-1.5 + e^-1.9 + e^-1.1 + e^-.5 = 4.0169996.
  const std::pair<double, double> taus[] = {
      {1.0, 2.2576657}, {5.0, 1.0142370}, {10.0, 0.5960379}, {20.0, 0.3227059}};
  for (const auto& [tau, squared] : taus) {
    EXPECT_NEAR(van_rossum_squared(a, b, tau), squared, 1e-7) << tau;
  }
  EXPECT_NEAR(van_rossum_squared(a, b, 1e-6), 3.0, 1e-12);
  EXPECT_NEAR(van_rossum_normalised(a, b, 1e-6), 1.0, 1e-12);
  EXPECT_NEAR(van_rossum_squared(a, b, 1e9), 0.0, 1e-6);
  EXPECT_NEAR(van_rossum_squared(a, short_b, 1e9), 0.5, 1e-6);
}

TEST(VanRossum, LinearTimeEqualsTheDoubleLoop) {
  RandomStream random(2, 0);
  for (int round = 0; round < 100; ++round) {
    const Times x = poisson_train(1.0 + round, 1000.0, random);
    const Times y = poisson_train(40.0, 1000.0, random);
    for (const double tau : {0.5, 10.0, 300.0}) {
      const auto sum = [&](const Times& u, const Times& v) {
        double total = 0.0;
        for (const double s : u) {
          for (const double t : v) {
            total += std::exp(-std::abs(s - t) / tau);
          }
        }
        return total;
      };
      const double slow = 0.5 * sum(x, x) + 0.5 * sum(y, y) - sum(x, y);
      EXPECT_NEAR(van_rossum_squared(x, y, tau), slow, 1e-9 * (1.0 + sum(x, x)));
    }
  }
}

// Cosine of two Gaussians at distance d: exp(-d^2 / (4 sigma^2)).
TEST(Schreiber, ClosedForms) {
  const std::pair<double, double> rows[] = {{1.0, 0.9726045}, {3.0, 0.7788008}, {6.0, 0.3678794}};
  for (const auto& [gap, cosine] : rows) {
    EXPECT_NEAR(*schreiber(Times{30.0}, Times{30.0 + gap}, 3.0), cosine, 1e-7);
  }
  EXPECT_FALSE(schreiber(none, a, 3.0));
  EXPECT_NEAR(*schreiber(a, a, 3.0), 1.0, 1e-12);
  EXPECT_NEAR(*schreiber(a, b, 1e7), 1.0, 1e-9);    // width to infinity: only the counts
  EXPECT_NEAR(*schreiber(a, b, 1e-3), 0.0, 1e-12);  // to 0: only exact coincidences
}

TEST(EventReliability, HandWorked) {
  EXPECT_NEAR(*event_reliability(Times{30.0}, Times{31.0}, 5.0), 0.8187308, 1e-7);
  EXPECT_NEAR(*event_reliability(Times{30.0}, Times{33.0}, 5.0), 0.5488116, 1e-7);
  EXPECT_NEAR(*event_reliability(a, a, 5.0), 1.0, 1e-15);
  EXPECT_EQ(*event_reliability(a, none, 5.0), 0.0);
  EXPECT_FALSE(event_reliability(none, none, 5.0));
  // A to {11, 19}: gaps 1, 1, 11; back: 1, 1.
  const double forth = (2.0 * std::exp(-0.2) + std::exp(-2.2)) / 3.0, back = std::exp(-0.2);
  EXPECT_NEAR(*event_reliability(a, short_b, 5.0), 0.5 * (forth + back), 1e-12);
}

// A = {4}, B = {6} in [0, 10): intervals 4 and 6 until 4, 6 and 6 until 6, 6 and 4 after:
// (4 / 3 + 0 + 4 / 3) / 10.
TEST(IsiDistance, HandWorked) {
  EXPECT_NEAR(*isi_distance(Times{4.0}, Times{6.0}, ten), 0.2666667, 1e-7);
  // {2, 4, 6, 8} against {2, 6}: 2 against 4 on [2, 10): 1/2 over 8 ms.
  EXPECT_NEAR(*isi_distance(Times{2.0, 4.0, 6.0, 8.0}, Times{2.0, 6.0}, ten), 0.4, 1e-12);
  EXPECT_NEAR(*isi_distance(none, none, ten), 0.0, 1e-15);
  // Empty against {5}: 10 against 5 throughout.
  EXPECT_NEAR(*isi_distance(none, Times{5.0}, ten), 0.5, 1e-12);
  EXPECT_FALSE(isi_distance(none, a, {0.0, 100.0}, EdgeRule::common_span));
  EXPECT_FALSE(isi_distance(none, a, {0.0, 100.0}, EdgeRule::longer_of_neighbours));
}

Times regular(double period, double begin, double length) {
  Times train;
  for (double t = begin; t < length; t += period) {
    train.push_back(t);
  }
  return train;
}

TEST(IsiDistance, RegularTrains) {
  const Window window{0.0, 1000.0};
  const Times p = regular(10.0, 5.0, 1000.0), q = regular(20.0, 5.0, 1000.0),
              shifted = regular(10.0, 7.0, 1000.0);
  EXPECT_NEAR(*isi_distance(p, q, window, EdgeRule::common_span), 0.5, 1e-12);
  EXPECT_NEAR(*isi_distance(p, shifted, window, EdgeRule::common_span), 0.0, 1e-12);
}

// A = {4}, B = {6}, auxiliary spikes at 0 and 10. On [0, 4): S1 = t/2, S2 = t/3,
// S = (6 t/2 + 4 t/3) / 50 = 13 t / 150, area 0.693333. On [4, 6): S1 + S2 = 10/3,
// S = 6 (10/3) / 72, area 0.555556. By symmetry 1.942222 / 10.
TEST(SpikeDistance, HandWorked) {
  EXPECT_NEAR(*spike_distance(Times{4.0}, Times{6.0}, ten), 0.1942222, 1e-7);
  struct Row {
    double gap, auxiliary, longer;
  };
  // Other gaps by the same arithmetic. Longer-of-neighbours, gap 1: S1 = S2 = 1; on [0, 4.5)
  // S = (5.5 + 4.5) / 50 = 0.2, on [4.5, 5.5) 11 / 60.5: (9 * 0.2 + 0.181818) / 10.
  for (const Row& row : {Row{1.0, 0.0991653, 0.1981818}, Row{2.0, 0.1942222, 0.3866667},
                         Row{4.0, 0.2715918, 0.7085714}}) {
    const Times x{5.0 - 0.5 * row.gap}, y{5.0 + 0.5 * row.gap};
    EXPECT_NEAR(*spike_distance(x, y, ten), row.auxiliary, 1e-7);
    EXPECT_NEAR(*spike_distance(x, y, ten, EdgeRule::longer_of_neighbours), row.longer, 1e-7);
  }
  const Times four{2.0, 4.0, 6.0, 8.0}, two{2.0, 6.0};
  EXPECT_NEAR(*spike_distance(four, two, ten), 0.1777778, 1e-7);
  EXPECT_NEAR(*spike_distance(four, two, ten, EdgeRule::longer_of_neighbours), 0.2222222, 1e-7);
  EXPECT_NEAR(*spike_distance(none, none, ten), 0.0, 1e-15);
  EXPECT_FALSE(spike_distance(none, two, ten, EdgeRule::longer_of_neighbours));
}

// Same period, shifted by s <= P/2: every difference is s, so S = s / P. Period against twice the
// period with common spikes: 2/9.
TEST(SpikeDistance, RegularTrains) {
  const Window window{0.0, 1000.0};
  const Times p = regular(10.0, 5.0, 1000.0);
  for (const double shift : {0.5, 2.0, 4.5}) {
    EXPECT_NEAR(
        *spike_distance(p, regular(10.0, 5.0 + shift, 1000.0), window, EdgeRule::common_span),
        shift / 10.0, 1e-12);
  }
  EXPECT_NEAR(*spike_distance(p, regular(20.0, 5.0, 1000.0), window, EdgeRule::common_span),
              2.0 / 9.0, 1e-12);
}

// Independent Poisson trains: the ISI-distance has mean (r^2 + 1) / (r + 1)^2 at rate ratio r. The
// mean over many trains, z-test at 1e-4.
TEST(IsiDistance, OfPoissonTrainsHasItsMean) {
  for (const double ratio : {1.0, 2.0, 4.0}) {
    double sum = 0.0, squares = 0.0;
    const int rounds = 300;
    for (int round = 0; round < rounds; ++round) {
      RandomStream random(7, static_cast<std::uint64_t>(round));
      const Times x = poisson_train(20.0, 2e4, random),
                  y = poisson_train(20.0 * ratio, 2e4, random);
      const double value = *isi_distance(x, y, {0.0, 2e4}, EdgeRule::common_span);
      sum += value;
      squares += value * value;
    }
    const double mean = sum / rounds, error = std::sqrt((squares / rounds - mean * mean) / rounds);
    EXPECT_NEAR(mean, (ratio * ratio + 1.0) / ((ratio + 1.0) * (ratio + 1.0)), 3.89 * error + 1e-3)
        << ratio;
    EXPECT_LT(error, 2e-3);
  }
}

TEST(Distances, AreZeroForATrainWithItselfAndSymmetric) {
  RandomStream random(8, 0);
  const Window window{0.0, 1000.0};
  for (int round = 0; round < 50; ++round) {
    const Times x = poisson_train(20.0, 1000.0, random), y = poisson_train(50.0, 1000.0, random);
    for (const EdgeRule edges :
         {EdgeRule::auxiliary_spikes, EdgeRule::longer_of_neighbours, EdgeRule::common_span}) {
      EXPECT_NEAR(*isi_distance(x, x, window, edges), 0.0, 1e-12);
      EXPECT_NEAR(*spike_distance(x, x, window, edges), 0.0, 1e-12);
      EXPECT_NEAR(*isi_distance(x, y, window, edges), *isi_distance(y, x, window, edges), 1e-12);
      const double forth = *spike_distance(x, y, window, edges);
      EXPECT_NEAR(forth, *spike_distance(y, x, window, edges), 1e-12);
      EXPECT_GT(forth, 0.0);
      EXPECT_LT(forth, 1.0);
    }
    EXPECT_EQ(victor_purpura(x, x, 200.0), 0.0);
    EXPECT_NEAR(victor_purpura(x, y, 200.0), victor_purpura(y, x, 200.0), 1e-9);
    EXPECT_NEAR(van_rossum_squared(x, x, 10.0), 0.0, 1e-9);
    EXPECT_NEAR(*schreiber(x, y, 4.0), *schreiber(y, x, 4.0), 1e-12);
    EXPECT_NEAR(*event_reliability(x, y, 4.0), *event_reliability(y, x, 4.0), 1e-12);
  }
}

TEST(Distances, TriangleInequalityWhereTheyAreMetrics) {
  RandomStream random(9, 0);
  for (int round = 0; round < 300; ++round) {
    const Times x = poisson_train(30.0, 300.0, random), y = poisson_train(30.0, 300.0, random),
                z = poisson_train(60.0, 300.0, random);
    for (const double q : {5.0, 100.0, 1000.0}) {
      EXPECT_LE(victor_purpura(x, z, q), victor_purpura(x, y, q) + victor_purpura(y, z, q) + 1e-9);
    }
    for (const double tau : {2.0, 30.0}) {
      const auto d = [&](const Times& u, const Times& v) {
        return std::sqrt(van_rossum_squared(u, v, tau));
      };
      EXPECT_LE(d(x, z), d(x, y) + d(y, z) + 1e-9);
    }
  }
}

TEST(Distances, SpikesAtTheBeginningOfTheWindow) {
  const Times x{0.0, 5.0}, y{5.0};
  EXPECT_NEAR(*isi_distance(x, y, ten), 0.0, 1e-12);
  EXPECT_TRUE(std::isfinite(*spike_distance(x, y, ten)));
  EXPECT_TRUE(std::isfinite(*spike_distance(x, y, ten, EdgeRule::longer_of_neighbours)));
}

TEST(PairMatrix, HoldsTheMeasuresOfTwoTrains) {
  RandomStream random(10, 0);
  const Window window{0.0, 500.0};
  TrialSet rows{{}, window}, columns{{{}}, window};
  for (int i = 0; i < 4; ++i) {
    rows.trains_ms.push_back(poisson_train(20.0, 500.0, random));
    columns.trains_ms.push_back(poisson_train(40.0, 500.0, random));
  }
  const PairSettings s;
  using Measure = std::function<double(const Times&, const Times&)>;
  const double nan = std::numeric_limits<double>::quiet_NaN();
  const std::pair<PairMeasure, Measure> rows_of[] = {
      {PairMeasure::coincidence,
       [&](const Times& x, const Times& y) { return *coincidence_factor(x, y, window).gamma; }},
      {PairMeasure::victor_purpura,
       [&](const Times& x, const Times& y) { return victor_purpura(x, y, s.cost_per_s); }},
      {PairMeasure::van_rossum,
       [&](const Times& x, const Times& y) {
         return std::sqrt(van_rossum_squared(x, y, s.tau_ms));
       }},
      {PairMeasure::schreiber,
       [&](const Times& x, const Times& y) { return schreiber(x, y, s.sigma_ms).value_or(nan); }},
      {PairMeasure::isi_distance,
       [&](const Times& x, const Times& y) { return *isi_distance(x, y, window); }},
      {PairMeasure::spike_distance,
       [&](const Times& x, const Times& y) { return *spike_distance(x, y, window); }},
      {PairMeasure::event_reliability,
       [&](const Times& x, const Times& y) { return *event_reliability(x, y, s.event_tau_ms); }}};
  for (const auto& [measure, direct] : rows_of) {
    const PairMatrix matrix = pair_matrix(measure, rows, columns);
    const PairMatrix square = pair_matrix(measure, rows);
    for (std::size_t i = 0; i < rows.size(); ++i) {
      for (std::size_t j = 0; j < columns.size(); ++j) {
        const double expected = direct(rows.trains_ms[i], columns.trains_ms[j]);
        if (std::isnan(expected)) {
          EXPECT_TRUE(std::isnan(matrix(i, j))) << name_of(measure);
        } else {
          EXPECT_NEAR(matrix(i, j), expected, 1e-12) << name_of(measure);
        }
      }
      for (std::size_t j = 0; j < rows.size(); ++j) {
        EXPECT_NEAR(square(i, j),
                    0.5 * (direct(rows.trains_ms[i], rows.trains_ms[j]) +
                           direct(rows.trains_ms[j], rows.trains_ms[i])),
                    1e-9)
            << name_of(measure);
      }
    }
  }
}

}  // namespace
}  // namespace softsill::metrics

// Goodness of fit of a predicted hazard.
#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "softsill/error.hpp"
#include "softsill/metrics/calibration.hpp"
#include "softsill/metrics/free_run.hpp"
#include "softsill/metrics/rescaling.hpp"
#include "tests/metrics/poisson_trains.hpp"

namespace softsill::metrics {
namespace {

// Two-sided critical values, as printed in tables (Massey 1951, Miller 1956; from memory) and
// computed exactly elsewhere.
TEST(Kolmogorov, PublishedQuantiles) {
  struct Row {
    std::size_t n;
    double q80, q90, q95, q99;
  };
  for (const Row& row : {Row{5, .4470, .5094, .5633, .6685}, Row{10, .3226, .3687, .4092, .4889},
                         Row{20, .2315, .2647, .2941, .3524}, Row{30, .1903, .2176, .2417, .2899},
                         Row{50, .1484, .1696, .1884, .2260}, Row{100, .1056, .1207, .1340, .1608},
                         Row{200, .0750, .0857, .0952, .1142}}) {
    EXPECT_NEAR(kolmogorov_quantile(row.n, 0.80), row.q80, 5.1e-5) << row.n;
    EXPECT_NEAR(kolmogorov_quantile(row.n, 0.90), row.q90, 5.1e-5) << row.n;
    EXPECT_NEAR(kolmogorov_quantile(row.n, 0.95), row.q95, 5.1e-5) << row.n;
    EXPECT_NEAR(kolmogorov_quantile(row.n, 0.99), row.q99, 5.1e-5) << row.n;
  }
  EXPECT_NEAR(kolmogorov_quantile(1000000, 0.95) * 1000.0, 1.3581, 2e-4);
}

// P(D_100 <= 0.1) = 0.7473072; P(D_10 <= 0.274) = 0.6284796154565 (Marsaglia, Tsang & Wang 2003,
// from memory). n = 1: P(D <= d) = 2 d - 1. n = 2, 1/2 <= d: 1 - 2 (1 - d)^2.
TEST(Kolmogorov, KnownProbabilities) {
  EXPECT_NEAR(kolmogorov_cdf(100, 0.1), 0.7473072, 5e-8);
  EXPECT_NEAR(kolmogorov_cdf(10, 0.274), 0.6284796154565, 1e-12);
  EXPECT_NEAR(kolmogorov_cdf(1, 0.7), 0.4, 1e-12);
  EXPECT_NEAR(kolmogorov_cdf(2, 0.6), 1.0 - 2.0 * 0.16, 1e-12);
  EXPECT_EQ(kolmogorov_cdf(10, 0.05), 0.0);
  EXPECT_EQ(kolmogorov_cdf(10, 1.0), 1.0);
}

// Values 0.1, 0.5, 0.6: distances 1/3 - .1, 2/3 - .5, 1 - .6 = .4; and from below .1, .5 - 1/3, 0.
TEST(Kolmogorov, StatisticByHand) {
  const KolmogorovSmirnov test = uniform_test(std::vector<double>{0.6, 0.1, 0.5});
  EXPECT_NEAR(test.statistic, 0.4, 1e-12);
  EXPECT_EQ(test.n, 3u);
  EXPECT_NEAR(kolmogorov_cdf(3, test.band), 0.95, 1e-9);
  EXPECT_EQ(uniform_test({}).p_value, 1.0);
}

TEST(Rescaling, LeavesOutWhatIsIncomplete) {
  const std::vector<double> integral{0.5, 1.5, 3.0};
  EXPECT_EQ(rescale(integral).z, (std::vector<double>{1.0, 1.5}));
  EXPECT_EQ(rescale(integral).left_out, 2u);
  EXPECT_EQ(rescale(integral, true).z, (std::vector<double>{0.5, 1.0, 1.5}));
  EXPECT_TRUE(rescale(std::vector<double>{0.5}).z.empty());
  EXPECT_TRUE(rescale({}).z.empty());
  Rescaled both = rescale(integral);
  both.append(rescale(std::vector<double>{1.0, 2.0}));
  EXPECT_EQ(both.z, (std::vector<double>{1.0, 1.5, 1.0}));
  EXPECT_EQ(both.trials, 2u);
  EXPECT_THROW(both.append(rescale(integral, true)), Error);
  EXPECT_NEAR(both.uniforms()[0], 1.0 - std::exp(-1.0), 1e-15);
}

// Under the true hazard p-values are uniform: 400 trains of a sinusoidal hazard, whose integral is
// a closed form. The share below 5 % within 3.89 binomial standard errors, and their mean.
TEST(Rescaling, TrueHazardGivesUniformPValues) {
  const double w = 2.0 * std::numbers::pi / 200.0;
  const auto rate = [&](double t) { return 30.0 * (1.0 + std::sin(w * t)); };
  const auto integral = [&](double t) { return 0.03 * (t + (1.0 - std::cos(w * t)) / w); };
  int rejected = 0;
  double mean = 0.0;
  const int rounds = 400;
  for (int round = 0; round < rounds; ++round) {
    RandomStream random(71, static_cast<std::uint64_t>(round));
    const TrialSet set = modulated_trials(1, 5000.0, 60.0, rate, random);
    std::vector<double> at;
    for (const double t : set.trains_ms[0]) {
      at.push_back(integral(t));
    }
    const double p = uniform_test(rescale(at).uniforms()).p_value;
    rejected += p < 0.05;
    mean += p / rounds;
  }
  EXPECT_NEAR(rejected, 0.05 * rounds, 3.89 * std::sqrt(rounds * 0.05 * 0.95));
  // A little above 1/2 is right: the number of complete intervals depends on their lengths.
  EXPECT_NEAR(mean, 0.5, 3.89 / std::sqrt(12.0 * rounds));
}

// Rows of 1 ms at 40 Hz: without the correction the statistic tends to p = 0.0392 and the true
// model is rejected; with it p-values are uniform (Haslinger, Pipa & Brown 2010).
TEST(Rescaling, CoarseRowsNeedTheCorrection) {
  int rejected = 0, rejected_plain = 0;
  const int rounds = 200;
  for (int round = 0; round < rounds; ++round) {
    RandomStream random(81, static_cast<std::uint64_t>(round));
    const std::size_t rows = 51000;
    const std::vector<double> expected(rows, 0.04);
    std::vector<unsigned char> spike(rows);
    std::vector<double> at;
    for (std::size_t i = 0; i < rows; ++i) {
      spike[i] = random.uniform() < -std::expm1(-0.04);
      if (spike[i]) {
        at.push_back(0.04 * static_cast<double>(i + 1));
      }
    }
    rejected += uniform_test(
                    rescale_rows(expected, spike, 82, static_cast<std::uint64_t>(round)).uniforms())
                    .p_value < 0.05;
    rejected_plain += uniform_test(rescale(at).uniforms()).p_value < 0.05;
  }
  EXPECT_NEAR(rejected, 0.05 * rounds, 3.89 * std::sqrt(rounds * 0.05 * 0.95));
  EXPECT_EQ(rejected_plain, rounds);
}

TEST(Rescaling, RowsWithoutSpikesBetweenAddUp) {
  const std::vector<double> expected{0.1, 0.2, 0.3, 0.4, 0.5};
  const std::vector<unsigned char> spike{0, 1, 0, 0, 1};
  const Rescaled r = rescale_rows(expected, spike, 1);
  ASSERT_EQ(r.z.size(), 1u);
  EXPECT_GT(r.z[0], 0.7);
  EXPECT_LT(r.z[0], 1.2);
}

TEST(Rescaling, ParametricBootstrapP) {
  EXPECT_DOUBLE_EQ(bootstrap_p_value(0.5, std::vector<double>{0.1, 0.5, 0.6}), 0.75);
  EXPECT_THROW(bootstrap_p_value(0.5, {}), Error);
}

TEST(SerialDependence, FindsACorrelationAndHoldsItsLevel) {
  int rejected = 0;
  const int rounds = 400;
  for (int round = 0; round < rounds; ++round) {
    RandomStream random(91, static_cast<std::uint64_t>(round));
    std::vector<std::vector<double>> trials(2, std::vector<double>(150));
    for (auto& trial : trials) {
      for (double& z : trial) {
        z = random.exponential();
      }
    }
    rejected += serial_dependence(trials).p_value < 0.05;
  }
  EXPECT_NEAR(rejected, 0.05 * rounds, 3.89 * std::sqrt(rounds * 0.05 * 0.95) + 4.0);
  // A Gaussian AR(1) with correlation 0.5, as exponential values.
  RandomStream random(92, 0);
  std::vector<std::vector<double>> trial(1);
  double g = random.normal();
  for (int i = 0; i < 4000; ++i) {
    g = 0.5 * g + std::sqrt(0.75) * random.normal();
    trial[0].push_back(-std::log(0.5 * std::erfc(g / std::numbers::sqrt2)));
  }
  const SerialDependence found = serial_dependence(trial, 3);
  EXPECT_NEAR(found.correlation[0], 0.5, 0.05);
  EXPECT_NEAR(found.correlation[1], 0.25, 0.07);
  EXPECT_LT(found.p_value, 1e-6);
  EXPECT_NEAR(found.band, 1.959964 / std::sqrt(3999.0), 1e-6);
}

// A rate alternating between a and b in equal time, scored over its own mean m:
// sum of 0.5 (x / m) log2(x / m). (20, 0) Hz: 1 bit; (15, 5): 0.1887219.
TEST(BitsPerSpike, AlternatingRates) {
  const auto score = [](double x, double y) {
    const double seconds = 500.0;  // in each state, so counts are exact
    const auto spikes = static_cast<std::size_t>(seconds * (x + y));
    const double log_likelihood = seconds * x * std::log(x / 1000.0) +
                                  (y > 0 ? seconds * y * std::log(y / 1000.0) : 0.0) -
                                  static_cast<double>(spikes);
    return bits_per_spike(log_likelihood, spikes, 2000.0 * seconds, 0.0005 * (x + y));
  };
  EXPECT_NEAR(score(20.0, 0.0), 1.0, 1e-12);
  EXPECT_NEAR(score(15.0, 5.0), 0.1887219, 1e-7);
  EXPECT_NEAR(score(30.0, 10.0), 0.1887219, 1e-7);
}

// 40 spikes in 20 s and 360 in 30 s: log likelihoods 522.292281 and 431.776617 (rates in Hz; the
// unit cancels), 0.3264662 bits per spike. Reference 400 / 50 = 8 Hz.
TEST(BitsPerSpike, TwoLevels) {
  const double per_ms = 522.292281 - 400.0 * std::log(1000.0);
  EXPECT_NEAR(bits_per_spike(per_ms, 400, 50000.0, 0.008), 0.3264662, 1e-7);
}

// Four rows of hazards 1, 2, 3, 4 per ms, exposure 1 ms, two groups: expected 3 and 7.
TEST(Calibration, HandWorked) {
  const std::vector<double> hazard{3, 1, 4, 2}, exposure{1, 1, 1, 1};
  const std::vector<unsigned> spikes{5, 0, 3, 2};
  const Calibration c = hazard_calibration(hazard, exposure, spikes, 2);
  ASSERT_EQ(c.groups.size(), 2u);
  EXPECT_DOUBLE_EQ(c.groups[0].expected, 3.0);
  EXPECT_EQ(c.groups[0].observed, 2u);
  EXPECT_DOUBLE_EQ(c.groups[1].expected, 7.0);
  EXPECT_EQ(c.groups[1].observed, 8u);
  // 2 (2 ln(2/3) + 1 + 8 ln(8/7) - 1)
  EXPECT_NEAR(c.statistic, 2.0 * (2.0 * std::log(2.0 / 3.0) + 8.0 * std::log(8.0 / 7.0)), 1e-12);
  EXPECT_NEAR(c.p_value, std::exp(-0.5 * c.statistic), 1e-12);  // 2 degrees of freedom
  EXPECT_TRUE(c.groups[0].inside);
  // Equal predicted counts: 5 each, so the row of hazard 3 falls in the first group
  // (1 + 2 + half of 3 is below 5).
  const Calibration e = hazard_calibration(hazard, exposure, spikes, 2, Grouping::equal_expected);
  EXPECT_DOUBLE_EQ(e.groups[0].expected, 6.0);
  EXPECT_EQ(c.warnings.size(), 1u);
}

struct Rows {
  std::vector<double> x, hazard, exposure;
  std::vector<unsigned> spikes;
};

// Hazard exp(x) / 100 per ms with truth exp(slope x) / 100, rows of 1 ms.
Rows rows(double slope, std::uint64_t seed) {
  Rows r;
  RandomStream random(seed, 0);
  for (int i = 0; i < 40000; ++i) {
    const double x = random.normal();
    r.x.push_back(x);
    r.hazard.push_back(0.01 * std::exp(x));
    r.exposure.push_back(1.0);
    const double truth = 0.01 * std::exp(slope * x);
    unsigned count = 0;
    for (double t = random.exponential(); t < truth; t += random.exponential()) {
      ++count;
    }
    r.spikes.push_back(count);
  }
  return r;
}

TEST(EscapeCheck, HoldsItsLevelAndFindsAWrongShape) {
  int rejected = 0;
  const int rounds = 200;
  for (int round = 0; round < rounds; ++round) {
    const Rows r = rows(1.0, 3000 + static_cast<std::uint64_t>(round));
    rejected += escape_check(r.x, r.hazard, r.exposure, r.spikes).p_value < 0.05;
  }
  EXPECT_NEAR(rejected, 0.05 * rounds, 3.89 * std::sqrt(rounds * 0.05 * 0.95));
  const Rows wrong = rows(0.6, 1);
  EXPECT_LT(escape_check(wrong.x, wrong.hazard, wrong.exposure, wrong.spikes).p_value, 1e-6);
  EXPECT_LT(hazard_calibration(wrong.hazard, wrong.exposure, wrong.spikes).p_value, 1e-6);
}

TEST(Calibration, TiedRowsStayTogether) {
  const std::vector<double> hazard(100, 0.1), exposure(100, 1.0);
  const std::vector<unsigned> spikes(100, 0);
  const Calibration c = hazard_calibration(hazard, exposure, spikes);
  ASSERT_EQ(c.groups.size(), 1u);
  EXPECT_NEAR(c.groups[0].expected, 10.0, 1e-9);
  EXPECT_FALSE(c.groups[0].inside);  // 0 observed: upper end 3.69
}

TEST(FreeRun, FlagsRunawayAndSilentModels) {
  RandomStream random(101, 0);
  const auto constant = [&](std::size_t n, double hz) {
    return modulated_trials(
        n, 2000.0, hz, [hz](double) { return hz; }, random);
  };
  const TrialSet cell = constant(5, 20.0);
  const FreeRun same = compare_free_run(cell, constant(200, 20.0));
  EXPECT_TRUE(same.keeps_rate);
  EXPECT_GT(*same.rate_p_value, 0.01);
  EXPECT_GT(*same.interval_p_value, 0.01);
  EXPECT_NEAR(*same.model.cv, 1.0, 0.05);
  TrialSet runaway = constant(200, 20.0);
  runaway.trains_ms[7] = constant(1, 400.0).trains_ms[0];
  const FreeRun away = compare_free_run(cell, runaway);
  EXPECT_EQ(away.runaway_trials, 1u);
  EXPECT_FALSE(away.keeps_rate);
  EXPECT_NE(away.finding.find("ran away"), std::string::npos);
  EXPECT_EQ(compare_free_run(cell, constant(50, 20.0), {3, 4}).runaway_trials, 2u);
  TrialSet silent = constant(200, 20.0);
  for (std::size_t i = 0; i < 150; ++i) {
    silent.trains_ms[i].clear();
  }
  const FreeRun quiet = compare_free_run(cell, silent);
  EXPECT_EQ(quiet.silent_trials, 150u);
  EXPECT_FALSE(quiet.keeps_rate);
  EXPECT_NE(quiet.finding.find("fell silent"), std::string::npos);
}

// Intervals 10, 20, 30: mean 20, standard deviation 10.
TEST(FreeRun, IntervalLawByHand) {
  const IntervalLaw law = interval_law({{{0.0, 10.0, 30.0, 60.0}}, {0.0, 100.0}});
  EXPECT_NEAR(law.rate_hz, 40.0, 1e-12);
  EXPECT_NEAR(*law.mean_ms, 20.0, 1e-12);
  EXPECT_NEAR(*law.cv, 0.5, 1e-12);
  EXPECT_FALSE(interval_law({{{1.0}}, {0.0, 100.0}}).cv);
}

}  // namespace
}  // namespace softsill::metrics

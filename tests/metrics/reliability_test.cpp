// Sets of repeats: means over pairs, set similarity without small-sample bias, explained variance.
#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <numbers>

#include "softsill/error.hpp"
#include "softsill/metrics/psth.hpp"
#include "softsill/metrics/reliability.hpp"
#include "tests/metrics/poisson_trains.hpp"

namespace softsill::metrics {
namespace {

// Square of {{9, 1, 2}, {1, 9, 3}, {2, 3, 9}}: mean over pairs (1 + 2 + 3) / 3 = 2. Weights
// {2, 1, 0}: only pairs of trial 1 with trial 2 are left (copies of trial 1 are no pair): 1.
TEST(PairTable, LeavesOutSelfPairsAndCopies) {
  const PairTable table(PairMatrix{3, 3, {9, 1, 2, 1, 9, 3, 2, 3, 9}});
  EXPECT_DOUBLE_EQ(*table.means().cell_cell, 2.0);
  EXPECT_DOUBLE_EQ(table.cell_cell_mean(std::vector<double>{2, 1, 0}), 1.0);
  // {1, 0, 2}: trial 1 with two copies of trial 3.
  EXPECT_DOUBLE_EQ(table.cell_cell_mean(std::vector<double>{1, 0, 2}), 2.0);
  // {2, 1, 1}: pairs 12 twice, 13 twice, 23 once: (2 + 4 + 3) / 5.
  EXPECT_DOUBLE_EQ(table.cell_cell_mean(std::vector<double>{2, 1, 1}), 1.8);
  EXPECT_TRUE(std::isnan(table.cell_cell_mean(std::vector<double>{3, 0, 0})));
}

TEST(PairTable, LeavesOutUndefinedPairs) {
  const double nan = std::numeric_limits<double>::quiet_NaN();
  const PairTable table(PairMatrix{3, 3, {nan, 1, nan, 1, 9, 3, nan, 3, 9}},
                        PairMatrix{3, 2, {1, nan, 3, 4, 5, 6}}, PairMatrix{2, 2, {1, nan, nan, 1}});
  EXPECT_DOUBLE_EQ(*table.means().cell_cell, 2.0);
  EXPECT_DOUBLE_EQ(*table.means().cell_model, 19.0 / 5.0);
  EXPECT_FALSE(table.means().model_model);
  // Weights {2, 0, 1} x {1, 1}: 2 * 1, 5, 6 over 4.
  EXPECT_DOUBLE_EQ(table.cell_model_mean(std::vector<double>{2, 0, 1}, std::vector<double>{1, 1}),
                   13.0 / 4.0);
}

TEST(PairTable, RefusesMatricesThatDoNotBelongTogether) {
  EXPECT_THROW(PairTable(PairMatrix{2, 3, std::vector<double>(6)}), Error);
  EXPECT_THROW(PairTable(PairMatrix{2, 2, std::vector<double>(4)},
                         PairMatrix{2, 2, std::vector<double>(4)}, PairMatrix{}),
               Error);
}

// Box of half width 4 by hand. Cell {10}, {12, 50}: one pair (10, 12). Model {11}, {15, 52}: one
// pair (11, 15). Cross: 10-11 1; 10-15 0; 12-11 1; {12, 50} with {15, 52}: 2. L = 4 / 4 = 1,
// R = 1 and 1: similarity 1.
TEST(SetSimilarity, HandWorked) {
  const TrialSet cell{{{10.0}, {12.0, 50.0}}, {0.0, 100.0}};
  const TrialSet model{{{11.0}, {15.0, 52.0}}, {0.0, 100.0}};
  const SetSimilarity box = set_similarity(cell, model);
  EXPECT_DOUBLE_EQ(box.cross, 1.0);
  EXPECT_DOUBLE_EQ(box.cell, 1.0);
  EXPECT_DOUBLE_EQ(box.model, 1.0);
  EXPECT_DOUBLE_EQ(*box.value, 1.0);
  // The other kernels of gaps: cell pair 2 and 40, model pair 4 and 41, and so on; width 5.
  const auto mean = [](const std::vector<double>& gaps, const auto& kernel, double pairs) {
    double sum = 0.0;
    for (const double gap : gaps) {
      sum += kernel(gap);
    }
    return sum / pairs;
  };
  // Model minus cell time, all pairs of spikes of all four pairs of trials.
  const std::vector<double> cross{1, 5, 42, -1, -39, 3, -35, 40, 2};
  const auto laplace = [](double gap) { return std::exp(-std::abs(gap) / 5.0); };
  const auto gauss = [](double gap) { return std::exp(-0.5 * gap * gap / 25.0); };
  const auto causal = [](double gap) { return gap >= 0.0 ? std::exp(-gap / 5.0) : 0.0; };
  const SetSimilarity two = set_similarity(cell, model, ProductKernel::two_sided_exponential, 5.0);
  EXPECT_NEAR(two.cross, mean(cross, laplace, 4.0), 1e-12);
  EXPECT_NEAR(two.cell, laplace(2.0) + laplace(40.0), 1e-12);
  const SetSimilarity bell = set_similarity(cell, model, ProductKernel::gaussian, 5.0);
  EXPECT_NEAR(bell.cross, mean(cross, gauss, 4.0), 1e-12);
  EXPECT_NEAR(bell.model, gauss(4.0) + gauss(41.0), 1e-12);
  const SetSimilarity one = set_similarity(cell, model, ProductKernel::one_sided_exponential, 5.0);
  EXPECT_NEAR(one.cross, mean(cross, causal, 4.0), 1e-12);
  EXPECT_NEAR(one.cell, 0.5 * (laplace(2.0) + laplace(40.0)), 1e-12);
}

TEST(SetSimilarity, NeedsTwoTrialsOfEach) {
  const TrialSet one{{{10.0}}, {0.0, 100.0}}, two{{{10.0}, {12.0}}, {0.0, 100.0}};
  EXPECT_FALSE(set_similarity(two, one).value);
  EXPECT_NE(set_similarity(two, one).absence.find("at least 2 trials"), std::string::npos);
  const TrialSet apart{{{10.0}, {90.0}}, {0.0, 100.0}};
  EXPECT_FALSE(set_similarity(apart, apart).value);
}

// Cell and model share one law, so the similarity is 1. Without self-pairs it is unbiased at 2 to
// 20 trials; with them (the plain ratio) it is far too low. z-tests at 1e-4 over many sets.
TEST(SetSimilarity, HasNoBiasAtFewTrialsWhereThePlainRatioHas) {
  const auto rate = [](double t) {
    return 20.0 + 19.0 * std::sin(2.0 * std::numbers::pi * t / 60.0);
  };
  for (const ProductKernel kernel :
       {ProductKernel::box, ProductKernel::two_sided_exponential,
        ProductKernel::one_sided_exponential, ProductKernel::gaussian}) {
    for (const std::size_t trials : {2u, 5u, 20u}) {
      const int rounds = trials == 20 ? 40 : 300;
      const double length_ms = trials == 2 ? 12000.0 : 5000.0;
      double sum = 0.0, squares = 0.0, plain_sum = 0.0;
      for (int round = 0; round < rounds; ++round) {
        RandomStream random(51 + trials, static_cast<std::uint64_t>(round));
        const TrialSet cell = modulated_trials(trials, length_ms, 40.0, rate, random);
        const TrialSet model = modulated_trials(trials, length_ms, 40.0, rate, random);
        // L and R are unbiased; their difference has mean 0 exactly, the ratio only nearly.
        const SetSimilarity s = set_similarity(cell, model, kernel, 4.0);
        const double gap = 2.0 * s.cross / (s.cell + s.model) - 1.0;
        sum += gap;
        squares += gap * gap;
        const auto naive = [&](const TrialSet& set) {
          const PairMatrix m = product_matrix(set, set, kernel, 4.0);
          double total = 0.0;
          for (const double value : m.values) {
            total += value;
          }
          return total / static_cast<double>(trials * trials);
        };
        plain_sum += 2.0 * s.cross / (naive(cell) + naive(model)) - 1.0;
      }
      const double mean = sum / rounds;
      const double error = std::sqrt((squares / rounds - mean * mean) / (rounds - 1));
      // A ratio of unbiased numbers has a bias of the order of its variance.
      EXPECT_NEAR(mean, 0.0, 3.89 * error + squares / rounds) << trials;
      EXPECT_LT(squares / rounds, 0.02) << trials;
      EXPECT_LT(plain_sum / rounds, trials == 20 ? -0.02 : -0.1) << trials;
    }
  }
}

// Constant rates 5 and 10 Hz: products are 2 D r_1 r_2 T, so 2 * 50 / (25 + 100) = 0.8.
TEST(SetSimilarity, OfConstantRatesIsNotCorrectedForChance) {
  RandomStream random(61, 0);
  const TrialSet slow = modulated_trials(
      20, 5e4, 5.0, [](double) { return 5.0; }, random);
  const TrialSet fast = modulated_trials(
      20, 5e4, 10.0, [](double) { return 10.0; }, random);
  EXPECT_NEAR(*set_similarity(slow, fast).value, 0.8, 0.03);
}

RateTable two_repeats() {
  RateTable table;
  table.trials = 2;
  table.bins = 4;
  table.step_ms = 1.0;
  table.rates = {0, 2, 0, 2, 0, 2, 1, 1};
  return table;
}

// r1 = (0,2,0,2), r2 = (0,2,1,1): mean (0,2,.5,1.5), variance 0.625. Variances 1 and 0.5, so
// SP = (2 * 0.625 - 0.75) / 1 = 0.5 (their covariance), NP = 0.25, ceiling sqrt(0.8).
TEST(ExplainedVariance, HandWorked) {
  const RateTable cell = two_repeats();
  const ExplainedVariance good = explained_variance(cell, std::vector<double>{0, 2, 1, 1});
  EXPECT_NEAR(good.signal_power, 0.5, 1e-12);
  EXPECT_NEAR(good.noise_power, 0.25, 1e-12);
  EXPECT_NEAR(*good.ceiling, 0.8944272, 1e-7);
  EXPECT_NEAR(*good.correlation, 0.8944272, 1e-7);
  EXPECT_NEAR(*good.normalised_correlation, 1.0, 1e-12);
  EXPECT_NEAR(*good.explained, 1.0, 1e-12);
  const ExplainedVariance poor = explained_variance(cell, std::vector<double>{1, 1, 0, 2});
  EXPECT_NEAR(*poor.correlation, 0.4472136, 1e-7);
  EXPECT_NEAR(*poor.normalised_correlation, 0.5, 1e-12);
  EXPECT_NEAR(*poor.explained, 0.0, 1e-12);
  // 1 - Var(-1, 1, .5, -.5) / 0.625 = 1 - 0.625 / 0.625.
  EXPECT_NEAR(*poor.plain, 0.0, 1e-12);
}

TEST(ExplainedVariance, GivesNoRatioWithoutSignal) {
  RateTable cell = two_repeats();
  cell.rates = {0, 2, 0, 2, 2, 0, 2, 0};  // opposite repeats: signal power -1
  const ExplainedVariance result = explained_variance(cell, std::vector<double>{0, 2, 1, 1});
  EXPECT_LT(result.signal_power, 0.0);
  EXPECT_FALSE(result.explained);
  EXPECT_FALSE(result.normalised_correlation);
  EXPECT_NE(result.absence.find("no reproducible rate"), std::string::npos);
}

// The table of covariances holds the same signal power, and (2 L - R_model) / R_cell is the same
// explained variance when the model's trials are alike.
TEST(ExplainedVariance, FromCovariancesIsTheSame) {
  const RateTable cell = two_repeats();
  RateTable model = cell;
  model.rates = {1, 1, 0, 2, 1, 1, 0, 2};
  const PairTable table = covariance_table(cell, model);
  EXPECT_NEAR(*table.means().cell_cell, 0.5, 1e-12);
  const ExplainedVariance direct = explained_variance(cell, model.mean());
  const PairMeans means = table.means();
  EXPECT_NEAR((2.0 * *means.cell_model - *means.model_model) / *means.cell_cell, *direct.explained,
              1e-12);
  EXPECT_NEAR(*means.cell_model / std::sqrt(*means.cell_cell * *means.model_model),
              *direct.normalised_correlation, 1e-12);
}

// Spikes at 1 and 7 in [0, 10), bins of 4 ms: counts 1, 1; the last 2 ms are left out.
TEST(RateTable, Bins) {
  const RateTable table =
      rate_table({{{1.0, 7.0}, {1.5, 9.0}}, {0.0, 10.0}}, {PsthSettings::Kind::bins, 4.0, 1.0});
  EXPECT_EQ(table.bins, 2u);
  EXPECT_EQ(table.rates, (std::vector<double>{0.25, 0.25, 0.25, 0.0}));
  EXPECT_EQ(table.mean(), (std::vector<double>{0.25, 0.125}));
  // Standard deviation of 1/4 and 0 is sqrt(1/32), over sqrt(2).
  EXPECT_NEAR(table.standard_error()[1], 0.125, 1e-12);
  EXPECT_NEAR(table.standard_error()[0], 0.0, 1e-12);
}

// Inside, a Gaussian of height 1 / (sigma sqrt(2 pi)); every spike keeps weight 1, also at the
// ends.
TEST(RateTable, Gaussian) {
  const RateTable table = rate_table({{{100.5}, {0.0}, {199.9}}, {0.0, 200.0}},
                                     {PsthSettings::Kind::gaussian, 5.0, 1.0});
  EXPECT_NEAR(table.trial(0)[100], 1.0 / (5.0 * std::sqrt(2.0 * std::numbers::pi)), 1e-6);
  EXPECT_NEAR(table.trial(0)[105] / table.trial(0)[100], std::exp(-0.5), 1e-9);
  for (std::size_t i = 0; i < 3; ++i) {
    double sum = 0.0;
    for (const double rate : table.trial(i)) {
      sum += rate;
    }
    EXPECT_NEAR(sum, 1.0, 0.01) << i;
  }
}

}  // namespace
}  // namespace softsill::metrics

// Kernel families, what separates, what is absent, and the numbers that a user can give or ask for
// besides: series resistance, an anchor, the refractory time, what came before a sweep.
#include <gmock/gmock.h>
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <string>
#include <vector>

#include "softsill/fit.hpp"
#include "tests/recovery/cells.hpp"

namespace softsill::test {
namespace {

using ::testing::AllOf;
using ::testing::Contains;
using ::testing::HasSubstr;

Cell plain_cell() {
  Cell cell;
  cell.theta_1.clear();
  cell.threshold_mV = -51.0;
  return cell;
}

Protocol short_protocol(bool with_voltage) {
  Protocol protocol;
  protocol.seconds = 30.0;
  protocol.with_voltage = with_voltage;
  return protocol;
}

Variant plain_variant() {
  Variant variant;
  variant.eta.support_ms = 300.0;
  variant.eta.count = 11;
  variant.theta_1.family = KernelFamily::absent;
  return variant;
}

TEST(Separation, NoSpikeWithinTheShortestIntervalIsSaid) {
  // Strong afterpotentials keep spikes well apart; the refractory time is capped below that.
  Cell cell = plain_cell();
  cell.eta = {{-25.0, 20.0}};
  const Recording recording = recording_of(cell, short_protocol(true), 41);
  double shortest = 1e9;
  const auto& spikes = recording.sweeps[0].spikes_ms;
  for (std::size_t i = 1; i < spikes.size(); ++i) {
    shortest = std::min(shortest, spikes[i] - spikes[i - 1]);
  }
  ASSERT_GT(shortest, 5.0);
  const Estimate estimate = fit(recording, plain_variant());
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  EXPECT_THAT(estimate.limits,
              Contains(AllOf(HasSubstr("no spike follows another within"), HasSubstr("4 ms"))));
  EXPECT_NEAR(estimate.model.refractory_ms, 4.0, 1e-6) << "the cap";
}

TEST(Separation, EmptyBinOfStepsIsHeldAndNamed) {
  Cell cell = plain_cell();
  cell.eta = {{-25.0, 20.0}};
  const Recording recording = recording_of(cell, short_protocol(false), 41);
  Variant variant = plain_variant();
  variant.use_voltage = false;
  variant.eta.family = KernelFamily::steps;
  variant.eta.edges_ms = {0.0, 5.0, 15.0, 30.0, 60.0, 120.0};
  const Estimate estimate = fit(recording, variant);
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  EXPECT_THAT(estimate.limits, Contains(HasSubstr("minus infinity")));
  const KernelCurve* curve = find_curve(estimate, "eta_minus_theta_1");
  ASSERT_NE(curve, nullptr);
  for (std::size_t i = 0; i < curve->value.size(); ++i) {
    EXPECT_TRUE(std::isfinite(curve->value[i]));
    EXPECT_GT(curve->value[i], -50.0) << "units of Delta";
  }
  // The true kernel's mean over a bin that is full of spikes, -25 exp(-s / 20) over 30..60 ms, is
  // -2.89 mV; in units of Delta
  const double middle = estimate.model.eta.value(45.0);
  EXPECT_NEAR(middle, -2.89 / cell.noise_level_mV, 0.6);
}

TEST(Kernels, AbsentOnesStayAbsent) {
  const Recording recording = recording_of(plain_cell(), short_protocol(true), 42);
  Variant variant = plain_variant();
  variant.eta.family = KernelFamily::absent;
  const Estimate estimate = fit(recording, variant);
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  EXPECT_FALSE(estimate.model.eta.present());
  EXPECT_FALSE(estimate.model.theta_1.present());
  for (const char* name : {"eta", "theta_1"}) {
    const KernelCurve* curve = find_curve(estimate, name);
    ASSERT_NE(curve, nullptr) << name;
    EXPECT_TRUE(curve->value.empty());
    EXPECT_FALSE(curve->why_absent.empty());
  }
  // With an afterpotential in the cell, leaving it out costs likelihood.
  EXPECT_GT(fit(recording, plain_variant()).log_likelihood, estimate.log_likelihood + 100.0);
}

TEST(Kernels, KappaAbsent) {
  for (bool with_voltage : {false, true}) {
    const Recording recording = recording_of(plain_cell(), short_protocol(with_voltage), 43);
    Variant variant = plain_variant();
    variant.kappa.family = KernelFamily::absent;
    const Estimate estimate = fit(recording, variant);
    EXPECT_TRUE(trustworthy(estimate.status)) << estimate.status_sentence;
    EXPECT_FALSE(estimate.model.kappa.present());
    EXPECT_EQ(find_row(estimate, "input_resistance"), nullptr);
    EXPECT_FALSE(estimate.kappa_consistency.tested);
    EXPECT_GE(estimate.spike_log_likelihood, estimate.constant_rate_log_likelihood);
  }
}

TEST(Kernels, PiecewiseConstant) {
  const Cell cell = plain_cell();
  const Recording recording = recording_of(cell, short_protocol(true), 44);
  Variant variant = plain_variant();
  variant.kappa.family = KernelFamily::steps;
  variant.kappa.edges_ms = {0,  1,  2,  3,  4,  5,  6,  7.5, 9,  10.5, 12, 14, 16, 18,
                            20, 23, 26, 29, 32, 36, 40, 45,  50, 60,   70, 85, 100};
  const Estimate estimate = fit(recording, variant);
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  const KernelCurve* kappa = find_curve(estimate, "kappa");
  ASSERT_NE(kappa, nullptr);
  EXPECT_FALSE(kappa->smoothing) << "steps have no smoothing parameter";
  // Each step is the mean of the true exponential over its bin, to 2 % of the peak.
  for (std::size_t j = 0; j + 1 < variant.kappa.edges_ms.size(); ++j) {
    const double from = variant.kappa.edges_ms[j], to = variant.kappa.edges_ms[j + 1];
    const double mean = cell.resistance_MOhm *
                        (std::exp(-from / cell.tau_m_ms) - std::exp(-to / cell.tau_m_ms)) /
                        (to - from);
    EXPECT_NEAR(estimate.model.kappa.coefficients[j], mean, 0.02 * cell.kappa(0.0)) << from;
  }
}

TEST(Kernels, PiecewiseConstantAfterpotential) {
  const Cell cell = plain_cell();
  Variant variant = plain_variant();
  variant.eta.family = KernelFamily::steps;
  variant.eta.edges_ms = {0.0};
  for (double edge = 5.0; edge < 300.0; edge *= 1.08) {
    variant.eta.edges_ms.push_back(edge);
  }
  const Estimate estimate = fit(recording_of(cell, short_protocol(true), 44), variant);
  EXPECT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  // Away from the first bin, most of which is left out around the spikes.
  for (std::size_t j = 2; j + 1 < variant.eta.edges_ms.size(); ++j) {
    const double middle = 0.5 * (variant.eta.edges_ms[j] + variant.eta.edges_ms[j + 1]);
    EXPECT_NEAR(estimate.model.eta.value(middle), value_at(cell.eta, middle), 0.25) << middle;
  }
  EXPECT_LT(std::abs(z_score(estimate.noise_level, cell.noise_level_mV, true)), 4.5);
}

/// Afterpotentials of one to three exponentials, all of them in the data.
class ExponentialCounts : public ::testing::TestWithParam<int> {
 protected:
  static std::vector<Decay> decays(int count) {
    const std::vector<Decay> all = {{-12.0, 8.0}, {-4.0, 45.0}, {-1.5, 250.0}};
    return {all.begin(), all.begin() + count};
  }
};

TEST_P(ExponentialCounts, TimeConstantsAreFound) {
  Cell cell = plain_cell();
  cell.eta = decays(GetParam());
  Variant variant = plain_variant();
  variant.kappa.family = KernelFamily::exponentials;
  variant.kappa.count = 1;
  variant.eta.family = KernelFamily::exponentials;
  variant.eta.count = GetParam();
  FitOptions options;
  options.starts = 2;
  options.before = Before::zero;
  const Estimate estimate = fit(recording_of(cell, short_protocol(true), 45), variant, options);
  ASSERT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  auto expect_found = [&](const std::string& name, double truth) {
    const Quantity* tau = find_row(estimate, name);
    ASSERT_NE(tau, nullptr) << name;
    EXPECT_EQ(tau->method, "profile likelihood");
    ASSERT_TRUE(tau->low && tau->high) << name;
    EXPECT_LT(*tau->low, *tau->value);
    EXPECT_GT(*tau->high, *tau->value);
    EXPECT_LT(std::abs(z_score(*tau, truth, true)), 4.5) << name << " is " << *tau->value;
  };
  expect_found("kappa.time_constant[1]", cell.tau_m_ms);
  // The fit may list them in any order.
  std::vector<double> found = estimate.model.eta.basis.time_constants_ms, sorted = found;
  std::sort(sorted.begin(), sorted.end());
  for (std::size_t j = 0; j < found.size(); ++j) {
    const auto rank = std::find(sorted.begin(), sorted.end(), found[j]) - sorted.begin();
    expect_found("eta.time_constant[" + std::to_string(j + 1) + "]",
                 cell.eta[static_cast<std::size_t>(rank)].tau_ms);
  }
}
INSTANTIATE_TEST_SUITE_P(Eta, ExponentialCounts, ::testing::Values(1, 2, 3));

TEST(SeriesResistance, IsFound) {
  Protocol protocol = short_protocol(true);
  protocol.series_resistance_MOhm = 8.0;
  const Cell cell = plain_cell();
  Recording recording = recording_of(cell, protocol, 46);
  recording.series_resistance.fit = true;
  const Estimate estimate = fit(recording, plain_variant());
  ASSERT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  const Quantity* found = find_row(estimate, "series_resistance", "observed information");
  ASSERT_NE(found, nullptr);
  EXPECT_EQ(found->unit, "MOhm");
  EXPECT_LT(std::abs(z_score(*found, 8.0)), 4.5);
  EXPECT_LT(*found->high - *found->low, 4.0) << "the potential shows it well";
  EXPECT_LT(std::abs(z_score(estimate.noise_level, cell.noise_level_mV, true)), 4.5);

  // Told the value, the fit subtracts it and comes to the same Delta.
  recording.series_resistance = {false, 8.0};
  const Estimate told = fit(recording, plain_variant());
  EXPECT_NEAR(*told.noise_level.value, *estimate.noise_level.value, 0.02);
}

TEST(Anchor, ResistanceScalesToMillivolt) {
  const Cell cell = plain_cell();
  const Recording recording = recording_of(cell, short_protocol(false), 47);
  FitOptions options;
  options.anchor = parse_anchor("resistance=120MOhm");
  const Estimate exact = fit(recording, plain_variant(), options);
  options.anchor = parse_anchor("resistance=120±18MOhm");
  const Estimate rough = fit(recording, plain_variant(), options);
  for (const Estimate* estimate : {&exact, &rough}) {
    ASSERT_EQ(estimate->status, FitStatus::converged) << estimate->status_sentence;
    EXPECT_EQ(estimate->mode, FitMode::spikes_anchored);
    ASSERT_TRUE(estimate->noise_level.value);
    EXPECT_EQ(estimate->noise_level.unit, "mV");
    EXPECT_THAT(estimate->noise_level.method, HasSubstr("anchored"));
    EXPECT_EQ(find_curve(*estimate, "kappa")->unit, "mV/(nA ms)");
    EXPECT_NEAR(estimate->model.kappa.integral(), 120.0, 1e-6);
    EXPECT_EQ(estimate->model.scale, PotentialScale::millivolt);
  }
  EXPECT_LT(std::abs(z_score(exact.noise_level, cell.noise_level_mV, true)), 4.5);
  // Relative errors add in squares: Delta = resistance / (kappa's integral in units of Delta).
  auto log_error = [](const Quantity& quantity) {
    return std::log(*quantity.high / *quantity.low) / (2.0 * 1.959964);
  };
  const double expected = std::hypot(log_error(exact.noise_level), 18.0 / 120.0);
  EXPECT_NEAR(log_error(rough.noise_level), expected, 0.01 * expected);
  EXPECT_NEAR(*rough.noise_level.value, *exact.noise_level.value, 1e-9);
}

TEST(Anchor, NoiseLevelScalesToMillivolt) {
  const Cell cell = plain_cell();
  const Recording recording = recording_of(cell, short_protocol(false), 47);
  FitOptions options;
  const Estimate alone = fit(recording, plain_variant(), options);
  options.anchor = parse_anchor("noise_level=1.5±0.2mV");
  const Estimate estimate = fit(recording, plain_variant(), options);
  ASSERT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  EXPECT_EQ(estimate.noise_level.method, "given");
  EXPECT_NEAR(*estimate.noise_level.value, 1.5, 1e-12);
  EXPECT_NEAR(estimate.model.kappa.integral(), 1.5 * alone.model.kappa.integral(), 1e-6);
  const Quantity* resistance = find_row(estimate, "input_resistance", "observed information");
  ASSERT_NE(resistance, nullptr);
  EXPECT_EQ(resistance->unit, "MOhm");
  EXPECT_LT(std::abs(z_score(*resistance, cell.resistance_MOhm)), 4.5);
  // Not narrower than the anchor alone makes it.
  EXPECT_GT(*resistance->high - *resistance->low, 2.0 * 1.96 * *resistance->value * 0.2 / 1.5);
  EXPECT_THAT(estimate.limits, Contains(HasSubstr("anchor")));
}

// The cell began at rest without current: told so, the fit uses the time that it would leave out.
TEST(Before, IsWhatTheUserSays) {
  const Cell cell = plain_cell();
  const Recording recording = recording_of(cell, short_protocol(true), 48);
  const Estimate unknown = fit(recording, plain_variant());
  EXPECT_NEAR(unknown.left_out_ms, 300.0, 1e-6);
  FitOptions options;
  options.before = Before::zero;
  const Estimate zero = fit(recording, plain_variant(), options);
  EXPECT_EQ(zero.left_out_ms, 0.0);
  EXPECT_NEAR(zero.analysed_ms, 30000.0, 1e-6);
  EXPECT_EQ(zero.spikes, unknown.spikes + unknown.left_out_spikes);
  EXPECT_EQ(zero.status, FitStatus::converged);
  options.before = Before::holding;
  options.holding = 0.0;
  const Estimate holding = fit(recording, plain_variant(), options);
  EXPECT_EQ(holding.log_likelihood, zero.log_likelihood) << "holding at 0 is zero";
  options.before = Before::first_value;
  const Estimate first = fit(recording, plain_variant(), options);
  options.before = Before::holding;
  options.holding = recording.sweeps[0].input.front();
  EXPECT_EQ(fit(recording, plain_variant(), options).log_likelihood, first.log_likelihood);
  EXPECT_NE(first.log_likelihood, zero.log_likelihood);
  // A wrong holding current shows in the likelihood of the first potentials.
  options.holding = 0.5;
  EXPECT_LT(fit(recording, plain_variant(), options).log_likelihood, zero.log_likelihood - 50.0);
}

TEST(Seeds, GiveTheSameNumbers) {
  const Recording recording = recording_of(plain_cell(), short_protocol(true), 49);
  Variant variant = plain_variant();
  variant.kappa.family = KernelFamily::exponentials;
  variant.kappa.count = 1;
  FitOptions options;
  options.starts = 3;
  options.seed = 12;
  const Estimate once = fit(recording, variant, options), twice = fit(recording, variant, options);
  EXPECT_EQ(to_json(once), to_json(twice));
  EXPECT_EQ(once.provenance.seed, 12u);
  options.seed = 13;
  const Estimate other = fit(recording, variant, options);
  EXPECT_NEAR(other.log_likelihood, once.log_likelihood, 1e-3) << "the same maximum";
}

}  // namespace
}  // namespace softsill::test

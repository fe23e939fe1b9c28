// The simulator against a plain one that integrates the same hazard on a very fine grid with the
// same random numbers, and against renewal laws integrated numerically.
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <ostream>
#include <string>
#include <vector>

#include "softsill/random.hpp"
#include "softsill/simulation.hpp"
#include "tests/model/kolmogorov.hpp"

namespace softsill {
namespace {

/// x(t) and the hazard for a given past, term by term.
class Plain {
 public:
  Plain(const Model& model, double constant_input) : model_(model) {
    base_ = model.resting_potential + constant_input * model.kappa.integral() - model.threshold;
  }
  double hazard(double t, const std::vector<double>& past) const {
    double x = base_;
    for (double spike : past) {
      x += (model_.eta.present() ? model_.eta.value(t - spike) : 0.0) -
           (model_.theta_1.present() ? model_.theta_1.value(t - spike) : 0.0);
    }
    return escape_rate(model_.escape, x / model_.noise_level);
  }
  /// Spikes up to `end` by the midpoint rule on a grid of `fine` restarted at every spike.
  std::vector<double> train(RandomStream random, double end, double fine) const {
    std::vector<double> past;
    double t = 0.0;
    while (t < end) {
      const double target = random.exponential();
      double gathered = 0.0;
      while (t < end) {
        const double rate = hazard(t + 0.5 * fine, past);
        if (gathered + rate * fine >= target) {
          t += (target - gathered) / rate;
          break;
        }
        gathered += rate * fine;
        t += fine;
      }
      if (t < end) {
        past.push_back(t);
        t += model_.refractory_ms;
      }
    }
    return past;
  }

 private:
  const Model& model_;
  double base_;
};

struct Case {
  std::string name;
  Escape escape;
  bool exponentials, spline, steps;
  double threshold;
  double refractory_ms;
};

void PrintTo(const Case& c, std::ostream* out) { *out << c.name; }

class AgainstPlain : public ::testing::TestWithParam<Case> {};

Model case_model(const Case& c) {
  Model model;
  model.escape = c.escape;
  model.kappa = {Basis::exponentials({20.0}), {5.0}};
  model.resting_potential = -65.0;
  model.threshold = c.threshold;
  model.noise_level = 2.0;
  model.refractory_ms = c.refractory_ms;
  if (c.exponentials) {
    model.eta = {Basis::exponentials({20.0, 60.0, 200.0}), {-6.0, -2.0, -0.5}};
    model.theta_1 = {Basis::exponentials({20.0, 7.0}), {3.0, 1.0}};
  }
  if (c.spline) {
    model.eta = {Basis::spline(120.0, 2.0, 7), {-9.0, -8.0, -7.0, -5.0, -3.0, -1.0, -0.5}};
  }
  if (c.steps) {
    model.theta_1 = {Basis::steps({0.0, 3.0, 10.0, 40.0, 80.0}), {8.0, 5.0, 2.0, 1.0}};
  }
  return model;
}

// Same random numbers, so the same trains but for the errors of the step. A spike's own error is
// handed on to all later ones, so only the first few are compared.
TEST_P(AgainstPlain, SameTrainsFromTheSameRandomNumbers) {
  const Case& c = GetParam();
  const Model model = case_model(c);
  const std::vector<double> input(4000, 0.1);
  SimulationOptions options;
  options.trials = 12;
  options.seed = 77;
  // Edges of step kernels act from the middle of the step they fall in.
  options.step_ms = c.steps ? 0.004 : 0.02;
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.1}, options);
  EXPECT_TRUE(result.runaways.empty());
  const Plain plain(model, 0.1);
  std::size_t compared = 0;
  for (std::size_t trial = 0; trial < options.trials; ++trial) {
    const std::vector<double> expected =
        plain.train(RandomStream(options.seed, trial), 400.0, 0.002);
    const std::vector<double>& train = result.trains_ms[trial];
    ASSERT_NEAR(static_cast<double>(train.size()), static_cast<double>(expected.size()), 1.0);
    for (std::size_t i = 0; i < std::min({train.size(), expected.size(), std::size_t{12}}); ++i) {
      EXPECT_NEAR(train[i], expected[i], 0.01) << c.name << " trial " << trial << " spike " << i;
      ++compared;
    }
  }
  EXPECT_GT(compared, 40u);
}

// The interval after the first spike has the survivor function exp(-integral of the hazard).
TEST_P(AgainstPlain, RenewalLaw) {
  const Case& c = GetParam();
  const Model model = case_model(c);
  const std::vector<double> input(10000, 0.1);
  SimulationOptions options;
  options.trials = 4000;
  options.seed = 5;
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.1}, options);
  std::vector<double> intervals;
  for (const auto& train : result.trains_ms) {
    ASSERT_GE(train.size(), 2u) << "the record must be long enough to hold both spikes";
    intervals.push_back(train[1] - train[0]);
  }
  const Plain plain(model, 0.1);
  constexpr double fine = 0.01;
  std::vector<double> integral = {0.0};
  for (double s = 0.0; s < 1000.0; s += fine) {
    const double middle = s + 0.5 * fine;
    const double rate = middle < model.refractory_ms ? 0.0 : plain.hazard(middle, {0.0});
    integral.push_back(integral.back() + rate * fine);
  }
  EXPECT_LT(
      kolmogorov(intervals,
                 [&](double s) {
                   const double place = s / fine;
                   const auto cell = static_cast<std::size_t>(place);
                   const double part = place - static_cast<double>(cell);
                   return -std::expm1(-(integral[cell] * (1.0 - part) + integral[cell + 1] * part));
                 }),
      kolmogorov_limit);
}

INSTANTIATE_TEST_SUITE_P(
    Models, AgainstPlain,
    ::testing::Values(
        Case{"exponentials", {EscapeKind::exponential, 1.0, 1.0}, true, false, false, -49.0, 2.0},
        Case{"no_dead_time", {EscapeKind::exponential, 1.0, 1.0}, true, false, false, -49.0, 0.0},
        Case{
            "short_dead_time", {EscapeKind::exponential, 1.0, 1.0}, true, false, false, -49, 0.015},
        Case{
            "spline_and_steps", {EscapeKind::exponential, 1.0, 1.0}, false, true, true, -49.0, 2.0},
        Case{"exponentials_and_steps",
             {EscapeKind::exponential, 1, 1},
             true,
             false,
             true,
             -49.0,
             1.0},
        Case{"softplus", {EscapeKind::softplus, 0.5, 1.0}, true, false, false, -51.0, 2.0},
        Case{"logistic", {EscapeKind::logistic, 0.5, 1.0}, false, true, true, -51.0, 0.0},
        Case{"power", {EscapeKind::rectified_power, 0.1, 2.5}, true, false, true, -55.0, 2.0},
        Case{"gaussian", {EscapeKind::gaussian_tail, 0.1, 1.0}, false, true, true, -55.0, 2.0},
        Case{"memoryless", {EscapeKind::softplus, 0.5, 1.0}, false, false, false, -49.0, 2.0}),
    [](const auto& info) { return info.param.name; });

}  // namespace
}  // namespace softsill

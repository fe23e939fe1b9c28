// The simulator against closed laws and against a plain simulator that integrates the same hazard
// on a very fine grid with the same random numbers.
#include "softsill/simulation.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <atomic>
#include <cmath>
#include <limits>
#include <string>
#include <vector>

#include "softsill/error.hpp"
#include "softsill/random.hpp"
#include "tests/model/kolmogorov.hpp"

namespace softsill {
namespace {

constexpr double forever_ms = 1e6;  // a refractory time that ends a trial with its first spike

Model constant_model(double rate_per_ms) {
  Model model;
  model.escape.lambda_0_per_ms = rate_per_ms;
  return model;
}

/// u - theta = mu t from time 0: kappa is constant, so a constant input adds up.
Model ramp_model() {
  Model model = constant_model(0.005);
  model.kappa = {Basis::steps({0.0, 1000.0}), {0.1}};
  model.noise_level = 2.0;
  model.refractory_ms = forever_ms;
  return model;
}

// Exponential hazard of a ramp: the law of Gompertz (1825). Closed-form quantiles.
TEST(Simulation, RampFollowsGompertz) {
  const std::vector<double> input(1500, 1.0);
  SimulationOptions options;
  options.trials = 20000;
  options.seed = 3;
  const SimulationResult result = simulate(ramp_model(), {input, 0.0, 0.1, 0.0}, options);
  std::vector<double> first;
  for (const auto& train : result.trains_ms) {
    ASSERT_EQ(train.size(), 1u);
    first.push_back(train[0]);
  }
  const double mu = 0.1, delta = 2.0, lambda = 0.005;
  EXPECT_LT(kolmogorov(first,
                       [&](double t) {
                         return -std::expm1(-lambda * delta / mu * std::expm1(mu * t / delta));
                       }),
            kolmogorov_limit);
  // Quantiles 0.1, 0.5, 0.9 of the law, worked out by hand.
  std::sort(first.begin(), first.end());
  const double quantiles[] = {14.39194, 41.41678, 63.58261};
  for (int i = 0; i < 3; ++i) {
    const double p = i == 0 ? 0.1 : i == 1 ? 0.5 : 0.9;
    const double below = static_cast<double>(
        std::lower_bound(first.begin(), first.end(), quantiles[i]) - first.begin());
    EXPECT_NEAR(below / 20000.0, p, 3.3 * std::sqrt(p * (1.0 - p) / 20000.0));
  }
}

// The same random number gives the same spike up to the error of the step, which falls as step^2.
TEST(Simulation, RefinementConvergesQuadratically) {
  const std::vector<double> input(1600, 1.0);
  std::vector<double> errors;
  for (double step : {0.8, 0.4, 0.2, 0.1}) {
    SimulationOptions options;
    options.trials = 400;
    options.seed = 8;
    options.step_ms = step;
    const SimulationResult result = simulate(ramp_model(), {input, 0.0, 0.1, 0.0}, options);
    double worst = 0.0;
    for (std::size_t trial = 0; trial < options.trials; ++trial) {
      const double e = RandomStream(options.seed, trial).exponential();
      const double exact = 20.0 * std::log1p(0.1 * e / (0.005 * 2.0));
      worst = std::max(worst, std::abs(result.trains_ms[trial].at(0) - exact));
    }
    errors.push_back(worst);
  }
  for (std::size_t i = 1; i < errors.size(); ++i) {
    EXPECT_GT(errors[i - 1] / errors[i], 3.5);
    EXPECT_LT(errors[i - 1] / errors[i], 4.5);
  }
  EXPECT_LT(errors.back(), 1e-4);
}

TEST(Simulation, ConstantRate) {
  const std::vector<double> input(100000, 0.0);
  SimulationOptions options;
  options.trials = 100;
  const SimulationResult result = simulate(constant_model(0.02), {input, 0.0, 0.1, 0.0}, options);
  const double expected = 0.02 * 10000.0 * 100.0;  // spikes
  EXPECT_NEAR(static_cast<double>(result.spike_count()), expected, 3.3 * std::sqrt(expected));
  EXPECT_NEAR(result.mean_rate_hz(), 20.0, 20.0 * 3.3 / std::sqrt(expected));
  EXPECT_NEAR(*result.interval_cv(), 1.0, 3.3 / std::sqrt(expected));
  std::vector<double> intervals, phases;
  for (const auto& train : result.trains_ms) {
    for (std::size_t i = 0; i < train.size(); ++i) {
      intervals.push_back(train[i] - (i > 0 ? train[i - 1] : 0.0));
      phases.push_back(train[i] / 0.1 - std::floor(train[i] / 0.1));
    }
  }
  EXPECT_LT(kolmogorov(intervals, [](double x) { return -std::expm1(-0.02 * x); }),
            kolmogorov_limit);
  EXPECT_LT(kolmogorov(phases, [](double x) { return x; }), kolmogorov_limit)
      << "spikes sit anywhere in their steps";
  // Counts of a Poisson process: variance over mean is 1, its standard error sqrt(2 / (n - 1)).
  double squares = 0.0;
  for (const auto& train : result.trains_ms) {
    const double off = static_cast<double>(train.size()) - 200.0;
    squares += off * off;
  }
  EXPECT_NEAR(squares / 100.0 / 200.0, 1.0, 3.3 * std::sqrt(2.0 / 99.0));
}

// Dead time t_abs: rate 1 / (1 / lambda + t_abs), CV = 1 / (1 + lambda t_abs): 41.6667 Hz and
// 0.83333 for 50 Hz and 4 ms.
TEST(Simulation, DeadTimeRateAndVariation) {
  Model model = constant_model(0.05);
  model.refractory_ms = 4.0;
  const std::vector<double> input(100000, 0.0);
  for (double step : {0.1, 3.0}) {  // a partial step ends the dead time exactly, whatever the step
    SimulationOptions options;
    options.trials = 100;
    options.seed = 12;
    options.step_ms = step;
    const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.0}, options);
    const double n = static_cast<double>(result.spike_count());
    const double cv = 1.0 / 1.2;
    EXPECT_NEAR(result.mean_rate_hz(), 41.6667, 3.3 * 41.6667 * cv / std::sqrt(n));
    EXPECT_NEAR(*result.interval_cv(), 0.83333, 3.3 / std::sqrt(n));
    std::vector<double> intervals;
    for (const auto& train : result.trains_ms) {
      for (std::size_t i = 1; i < train.size(); ++i) {
        intervals.push_back(train[i] - train[i - 1]);
      }
    }
    // The spike time itself carries rounding of its own size.
    EXPECT_GE(*std::min_element(intervals.begin(), intervals.end()), 4.0 - 1e-9);
    EXPECT_LT(kolmogorov(intervals,
                         [](double x) { return x < 4.0 ? 0.0 : -std::expm1(-0.05 * (x - 4.0)); }),
              kolmogorov_limit);
  }
}

// Two levels of current, log-linear hazard without memory: ln 2 per second at 0, slope ln(6) / 0.1.
TEST(Simulation, TwoLevels) {
  Model model = constant_model(0.002);
  // A box of 1 ms and area log(6) / 0.1: the input's mean over the last millisecond.
  model.kappa = {Basis::steps({0.0, 1.0}), {std::log(6.0) / 0.1}};
  std::vector<double> input(500000, 0.0);
  std::fill(input.begin() + 200000, input.end(), 0.1);
  SimulationOptions options;
  options.trials = 50;
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.0}, options);
  double low = 0.0, high = 0.0;
  for (const auto& train : result.trains_ms) {
    for (double t : train) {
      (t < 20000.0 ? low : high) += 1.0;
    }
  }
  EXPECT_NEAR(low, 50 * 40.0, 3.3 * std::sqrt(50 * 40.0));
  EXPECT_NEAR(high, 50 * 360.0, 3.3 * std::sqrt(50 * 360.0));
}

/// A cell with exponential eta and, if asked, the threshold moving in steps.
Model memory_model(double threshold, bool moving_threshold) {
  Model model;
  model.kappa = {Basis::exponentials({20.0}), {5.0}};
  model.eta = {Basis::exponentials({20.0, 60.0, 200.0}), {-6.0, -2.0, -0.5}};
  model.theta_1 = {Basis::exponentials({20.0, 7.0}), {3.0, 1.0}};
  if (moving_threshold) {
    model.theta_1 = {Basis::steps({0.0, 3.0, 10.0, 40.0, 80.0}), {8.0, 5.0, 2.0, 1.0}};
  }
  model.resting_potential = -65.0;
  model.threshold = threshold;
  model.noise_level = 2.0;
  model.refractory_ms = 2.0;
  return model;
}

SimulationResult noisy(std::uint64_t seed, int threads, std::size_t trials) {
  Model model = memory_model(-50.0, true);
  std::vector<double> input(30000);
  RandomStream random(99, 0);
  for (double& value : input) {
    value = 0.1 + 0.3 * random.normal();
  }
  SimulationOptions options;
  options.seed = seed;
  options.threads = threads;
  options.trials = trials;
  options.mean_voltage = true;
  return simulate(model, {input, 500.0, 0.05, 0.0}, options);
}

TEST(Simulation, NoThreadCountChangesAnything) {
  const SimulationResult one = noisy(4, 1, 7);
  EXPECT_GT(one.spike_count(), 50u);
  for (int threads : {2, 5, 0}) {
    const SimulationResult many = noisy(4, threads, 7);
    EXPECT_EQ(one.trains_ms, many.trains_ms);
    EXPECT_EQ(one.mean_voltage_mV, many.mean_voltage_mV);
  }
}

TEST(Simulation, TrialsDependOnSeedAndIndexAlone) {
  const SimulationResult few = noisy(4, 0, 3), many = noisy(4, 0, 7), other = noisy(5, 0, 7);
  for (std::size_t k = 0; k < 3; ++k) {
    EXPECT_EQ(few.trains_ms[k], many.trains_ms[k]);
  }
  for (std::size_t k = 0; k < 7; ++k) {
    EXPECT_NE(many.trains_ms[k], other.trains_ms[k]);
    EXPECT_NE(many.trains_ms[k], many.trains_ms[(k + 1) % 7]);
  }
}

TEST(Simulation, SpikesLieInsideAndIncrease) {
  const SimulationResult result = noisy(1, 0, 5);
  EXPECT_EQ(result.start_ms, 500.0);
  EXPECT_EQ(result.end_ms, 2000.0);
  for (const auto& train : result.trains_ms) {
    ASSERT_FALSE(train.empty());
    EXPECT_GE(train.front(), 500.0);
    EXPECT_LT(train.back(), 2000.0);
    for (std::size_t i = 1; i < train.size(); ++i) {
      EXPECT_GE(train[i] - train[i - 1], 2.0 - 1e-9);
    }
  }
}

// u by its definition, spike by spike.
TEST(Simulation, MeanVoltageIsTheMeanOfU) {
  for (bool spline : {false, true}) {
    Model model = memory_model(-52.0, false);
    if (spline) {
      model.eta = {Basis::spline(120.0, 2.0, 7), {-9.0, -8.0, -7.0, -5.0, -3.0, -1.0, -0.5}};
    }
    std::vector<double> input(4000);
    for (std::size_t i = 0; i < input.size(); ++i) {
      input[i] = 0.1 + 0.1 * std::sin(0.02 * static_cast<double>(i));
    }
    SimulationOptions options;
    options.trials = 4;
    options.mean_voltage = true;
    const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.05}, options);
    ASSERT_EQ(result.mean_voltage_mV.size(), 4000u);
    std::vector<double> times;
    for (std::size_t i = 0; i < 4000; ++i) {
      times.push_back(0.1 * (static_cast<double>(i) + 0.5));
    }
    const std::vector<double> driven = filtered_input(model.kappa, input, 0.0, 0.1, 0.05, times);
    double worst = 0.0;
    for (std::size_t i = 0; i < 4000; ++i) {
      double u = model.resting_potential + driven[i];
      for (const auto& train : result.trains_ms) {
        for (double spike : train) {
          u += spike < times[i] ? model.eta.value(times[i] - spike) / 4.0 : 0.0;
        }
      }
      worst = std::max(worst, std::abs(u - result.mean_voltage_mV[i]));
    }
    // Lags rounded to 1/32 step against slopes of at most 1 mV/ms; exponentials exactly.
    EXPECT_LT(worst, spline ? 0.01 : 1e-9);
  }
}

// Input and simulation need not share a step.
TEST(Simulation, AnyStepOverAnyInput) {
  const Model model = ramp_model();
  for (double input_step : {0.05, 0.1, 0.37}) {
    const std::vector<double> input(static_cast<std::size_t>(160.0 / input_step), 1.0);
    for (double step : {0.1, 0.033, 0.25}) {
      SimulationOptions options;
      options.trials = 20;
      options.step_ms = step;
      const SimulationResult result = simulate(model, {input, -7.0, input_step, 0.0}, options);
      for (std::size_t trial = 0; trial < options.trials; ++trial) {
        const double e = RandomStream(options.seed, trial).exponential();
        ASSERT_EQ(result.trains_ms[trial].size(), 1u);
        EXPECT_NEAR(result.trains_ms[trial][0], -7.0 + 20.0 * std::log1p(10.0 * e), 1e-3);
      }
    }
  }
}

// All in units of Delta is the same process as all in mV.
TEST(Simulation, UnitsOfDeltaGiveTheSameTrains) {
  Model in_mV = memory_model(-50.0, false);
  Model in_delta = in_mV;
  in_delta.scale = PotentialScale::noise_level;
  in_delta.threshold = (in_mV.threshold - in_mV.resting_potential) / 2.0;
  in_delta.resting_potential = 0.0;
  in_delta.noise_level = 1.0;
  for (double& a : in_delta.kappa.coefficients) {
    a /= 2.0;
  }
  in_delta.eta = {Basis::exponentials({20.0, 60.0, 200.0, 7.0}), {-4.5, -1.0, -0.25, -0.5}};
  in_delta.theta_1 = {};
  const std::vector<double> input(10000, 0.15);
  const DrivingInput driving{input, 0.0, 0.1, 0.0};
  const SimulationResult a = simulate(in_mV, driving), b = simulate(in_delta, driving);
  ASSERT_EQ(a.spike_count(), b.spike_count());
  EXPECT_GT(a.spike_count(), 5u);
  for (std::size_t i = 0; i < a.trains_ms[0].size(); ++i) {
    EXPECT_NEAR(a.trains_ms[0][i], b.trains_ms[0][i], 1e-6);
  }
  SimulationOptions options;
  options.mean_voltage = true;
  EXPECT_THROW(simulate(in_delta, driving, options), Error);
}

TEST(Simulation, RunawaysAreStoppedAndNamed) {
  const std::vector<double> input(1000000, 0.0);
  SimulationOptions options;
  options.trials = 3;
  Model exciting = constant_model(0.01);
  exciting.eta = {Basis::exponentials({50.0}), {50.0}};
  for (double refractory : {0.0, 2.0}) {  // the second saturates at its ceiling of 500 Hz
    exciting.refractory_ms = refractory;
    for (EscapeKind kind : {EscapeKind::exponential, EscapeKind::softplus}) {
      exciting.escape.kind = kind;
      const SimulationResult result = simulate(exciting, {input, 0.0, 0.1, 0.0}, options);
      ASSERT_EQ(result.runaways.size(), 3u);
      for (const Runaway& runaway : result.runaways) {
        EXPECT_EQ(result.trains_ms[runaway.trial].back(), runaway.stopped_ms);
        EXPECT_LT(runaway.stopped_ms, 5000.0);
      }
      EXPECT_GT(result.mean_rate_hz(), 50.0);
    }
  }
  Model hopeless = constant_model(1.0);
  hopeless.threshold = -1e9;
  const SimulationResult result = simulate(hopeless, {input, 0.0, 0.1, 0.0}, options);
  EXPECT_EQ(result.runaways.size(), 3u);
  for (const auto& train : result.trains_ms) {
    EXPECT_TRUE(std::is_sorted(train.begin(), train.end(), std::less_equal<double>()));
  }
}

// A refractory cell at 400 Hz under a ceiling of 1000 Hz is fast, not running away.
TEST(Simulation, FastIsNotRunaway) {
  Model model = constant_model(2.0 / 3.0);
  model.refractory_ms = 1.0;
  const std::vector<double> input(50000, 0.0);
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.0});
  EXPECT_TRUE(result.runaways.empty());
  EXPECT_NEAR(result.mean_rate_hz(), 400.0, 15.0);
}

TEST(Simulation, SilenceIsAResult) {
  Model model = constant_model(1.0);
  model.threshold = 1e9;
  const std::vector<double> input(1000, 0.0);
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.0});
  EXPECT_EQ(result.spike_count(), 0u);
  EXPECT_EQ(result.mean_rate_hz(), 0.0);
  EXPECT_FALSE(result.interval_cv().has_value());
}

TEST(Simulation, CanBeStopped) {
  const std::vector<double> input(100000, 0.0);
  SimulationOptions options;
  options.trials = 50;
  options.threads = 2;
  std::atomic<int> calls{0};
  options.progress = [&](double share) {
    EXPECT_GT(share, 0.0);
    EXPECT_LE(share, 1.0);
    return ++calls < 5;
  };
  const SimulationResult result = simulate(constant_model(0.01), {input, 0.0, 0.1, 0.0}, options);
  EXPECT_TRUE(result.interrupted);
  EXPECT_LT(result.trains_ms.size(), 50u);
}

TEST(Simulation, BadInputIsNamed) {
  const std::vector<double> good(100, 0.0);
  std::vector<double> broken = good;
  broken[41] = std::numeric_limits<double>::quiet_NaN();
  const Model model = constant_model(0.01);
  const auto expect = [](const Model& m, const DrivingInput& driving,
                         const SimulationOptions& options, const std::string& part) {
    try {
      simulate(m, driving, options);
      ADD_FAILURE() << "no error: " << part;
    } catch (const Error& error) {
      EXPECT_NE(std::string(error.what()).find(part), std::string::npos) << error.what();
    }
  };
  expect(model, {{}, 0.0, 0.1, 0.0}, {}, "no samples");
  expect(model, {broken, 0.0, 0.1, 0.0}, {}, "sample 42");
  expect(model, {good, 0.0, 0.0, 0.0}, {}, "sampling step");
  SimulationOptions options;
  options.trials = 0;
  expect(model, {good, 0.0, 0.1, 0.0}, options, "at least one trial");
  options = {};
  options.step_ms = -1.0;
  expect(model, {good, 0.0, 0.1, 0.0}, options, "step must be positive");
  options.step_ms = 1e-12;
  expect(model, {good, 0.0, 0.1, 0.0}, options, "steps");
  Model bad = model;
  bad.noise_level = 0.0;
  expect(bad, {good, 0.0, 0.1, 0.0}, {}, "noise level");
  bad = model;
  bad.eta = {Basis::exponentials({20.0}), {1.0, 2.0}};
  expect(bad, {good, 0.0, 0.1, 0.0}, {}, "2 coefficients for 1");
  bad.eta.coefficients = {std::numeric_limits<double>::infinity()};
  expect(bad, {good, 0.0, 0.1, 0.0}, {}, "not finite");
}

}  // namespace
}  // namespace softsill

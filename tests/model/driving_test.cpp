// What a simulation is made of: the input's effect on its grid, the table of the hazard, exp().
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <limits>
#include <vector>

#include "estimator/model/driving.hpp"
#include "estimator/model/hazard_table.hpp"
#include "estimator/model/steady_exp.hpp"
#include "softsill/random.hpp"
#include "softsill/simulation.hpp"

namespace softsill {
namespace {

/// (kernel * I)(t) by eight-point Gauss-Legendre on every sample cut at the knots.
double plain_response(const Kernel& kernel, const std::vector<double>& input, double step,
                      double before, double t) {
  static const double x[4] = {0.1834346424956498, 0.5255324099163290, 0.7966664774136267,
                              0.9602898564975363};
  static const double w[4] = {0.3626837833783620, 0.3137066458778873, 0.2223810344533745,
                              0.1012285362903763};
  const double reach = kernel.basis.family == KernelFamily::exponentials
                           ? 40.0 / 7.0 * kernel.basis.support_ms
                           : kernel.basis.support_ms;
  std::vector<double> cuts = {0.0, reach};
  for (double knot : kernel.basis.knots_ms) {
    if (knot > 0.0 && knot < reach) {
      cuts.push_back(knot);
    }
  }
  for (long j = static_cast<long>(t / step); t - static_cast<double>(j) * step < reach; --j) {
    cuts.push_back(std::max(0.0, t - static_cast<double>(j) * step));
  }
  std::sort(cuts.begin(), cuts.end());
  double sum = 0.0;
  for (std::size_t i = 0; i + 1 < cuts.size(); ++i) {
    const double half = 0.5 * (cuts[i + 1] - cuts[i]), middle = 0.5 * (cuts[i + 1] + cuts[i]);
    const double place = std::floor((t - middle) / step);
    const double value = place < 0.0 ? before : input[static_cast<std::size_t>(place)];
    for (int g = 0; g < 4 && half > 0.0; ++g) {
      sum += half * w[g] * value *
             (kernel.value(middle + half * x[g]) + kernel.value(middle - half * x[g]));
    }
  }
  return sum;
}

// The input's effect in all the ways steps and samples can meet, against plain quadrature.
TEST(Driving, EveryRatioOfStepsAndSamples) {
  std::vector<double> input(3001);
  RandomStream random(31, 0);
  for (double& value : input) {
    value = 0.2 + random.normal();
  }
  const Kernel kernels[] = {{Basis::exponentials({4.0, 15.0}), {5.0, -1.0}},
                            {Basis::spline(60.0, 1.0, 6), {5.0, 4.0, -3.0, 2.0, 1.0, 0.5}},
                            {Basis::steps({0.0, 0.77, 5.0, 33.0}), {5.0, 2.0, -1.0}}};
  for (const Kernel& kernel : kernels) {
    // One, two, three, four samples a step; two and three steps a sample; neither.
    for (double step : {0.1, 0.2, 0.3, 0.4, 0.05, 0.1 / 3.0, 0.13}) {
      const DrivingInput driving{input, 50.0, 0.1, -0.7};
      // At arbitrary places the truncated powers of splines cancel a few digits.
      const double tolerance = step == 0.13 ? 1e-7 : 1e-10;
      const StepGrid grid(driving, step);
      const std::size_t half = grid.steps / 2;
      std::vector<double> effect = input_effect(kernel, driving, grid, 0, half);
      const std::vector<double> rest = input_effect(kernel, driving, grid, half, grid.steps);
      effect.insert(effect.end(), rest.begin(), rest.end());
      ASSERT_EQ(effect.size(), grid.steps);
      for (std::size_t i = 0; i < grid.steps; i += i < 10 || i + 10 > grid.steps ? 1 : 97) {
        const double t = grid.middle(i) - 50.0;
        EXPECT_NEAR(effect[i], plain_response(kernel, input, 0.1, -0.7, t), tolerance)
            << to_string(kernel.basis.family) << " step " << step << " at " << i;
      }
    }
  }
}

// Long records are worked on in stretches; a stretch must not show.
TEST(Simulation, StretchesJoinWithoutASeam) {
  Model model;
  model.eta = {Basis::exponentials({20.0, 60.0}), {-6.0, -2.0}};
  model.resting_potential = -65.0;
  model.threshold = -40.0;
  model.noise_level = 2.0;
  model.refractory_ms = 2.0;
  model.kappa = {Basis::spline(150.0, 1.0, 6), {5.0, 4.0, 3.0, 2.0, 1.0, 0.5}};
  std::vector<double> input(600000);
  for (std::size_t i = 0; i < input.size(); ++i) {
    input[i] = 0.1 + 0.05 * std::sin(0.001 * static_cast<double>(i));
  }
  SimulationOptions options;
  options.mean_voltage = true;
  const SimulationResult result = simulate(model, {input, 0.0, 0.1, 0.0}, options);
  for (std::size_t i = 262134; i < 262154; ++i) {  // around 2^18 steps
    const double t = 0.1 * (static_cast<double>(i) + 0.5);
    double u = model.resting_potential + plain_response(model.kappa, input, 0.1, 0.0, t);
    for (double spike : result.trains_ms[0]) {
      u += spike < t ? model.eta.value(t - spike) : 0.0;
    }
    EXPECT_NEAR(result.mean_voltage_mV[i], u, 1e-9);
  }
}

TEST(HazardTable, KeepsItsPromisedError) {
  for (const Escape& escape :
       {Escape{EscapeKind::softplus, 0.5, 1.0}, Escape{EscapeKind::logistic, 0.2, 1.0},
        Escape{EscapeKind::rectified_power, 0.1, 0.4},
        Escape{EscapeKind::rectified_power, 0.1, 2.0},
        Escape{EscapeKind::rectified_power, 1e-3, 6.0},
        Escape{EscapeKind::gaussian_tail, 0.1, 1.0}}) {
    const HazardTable table(escape, 0.1);
    double worst = 0.0;
    for (double x = table.low(); x < 40.0; x += 0.00137) {
      const double exact = 0.1 * escape_rate(escape, x);
      worst = std::max(worst, std::abs(table(x) / exact - 1.0));
    }
    EXPECT_LT(worst, 1e-6) << to_string(escape.kind) << " n = " << escape.exponent;
    EXPECT_LT(escape_rate(escape, table.low() - 1e-9), 1e-13);
    EXPECT_EQ(table(table.low() - 1e-6), 0.0);
    EXPECT_EQ(table(-1e300), 0.0);
    EXPECT_EQ(table(-std::numeric_limits<double>::infinity()), 0.0);
    EXPECT_TRUE(std::isnan(table(std::numeric_limits<double>::quiet_NaN())));
  }
}

TEST(SteadyExp, AgreesWithTheLibrary) {
  double worst = 0.0;
  for (double x = -700.0; x <= 700.0; x += 0.00917) {
    const long double exact = std::exp(static_cast<long double>(x));
    worst = std::max(worst, static_cast<double>(std::abs(steady_exp(x) / exact - 1.0L)));
  }
  EXPECT_LT(worst, 4e-16);
  EXPECT_EQ(steady_exp(0.0), 1.0);
  EXPECT_EQ(steady_exp(-1e9), steady_exp(-700.0));
  EXPECT_EQ(steady_exp(1e9), steady_exp(700.0));
}

}  // namespace
}  // namespace softsill

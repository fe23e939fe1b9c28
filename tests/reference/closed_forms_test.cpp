// Maximum-likelihood estimates that are known in closed form, to ten digits: on a design, through
// the quadrature, and through the whole fit.
#include <gtest/gtest.h>

#include <cmath>
#include <vector>

#include "estimator/fit/ceres_minimizer.hpp"
#include "estimator/fit/uncertainty.hpp"
#include "softsill/fit.hpp"
#include "softsill/random.hpp"
#include "tests/reference/spike_objective.hpp"

namespace softsill::reference {
namespace {

constexpr double per_second = 1e-3;  ///< 1/s in 1/ms
constexpr double ten_digits = 1e-10;

/// A minimum to the last digit: minimize(), and a Newton step that must stay within what rounding
/// of the value explains.
Minimum settled(Objective& objective, const Vector& start) {
  MinimizerOptions options;
  options.decrement = 0.0;
  Minimum minimum = minimize(objective, start, options);
  EXPECT_TRUE(minimum.passed()) << minimum.report;
  const Vector further = one_step_further(minimum);
  const Vector step = (further - minimum.theta).cwiseQuotient(standard_errors(minimum.hessian));
  EXPECT_LT(measured("last step, standard errors", step.cwiseAbs().maxCoeff()),
            2.0 * rounding_in_errors(minimum));
  minimum.theta = further;
  const Evaluated there = objective.evaluate(further, Want::derivatives);
  minimum.value = there.value;
  minimum.hessian = there.hessian;
  return minimum;
}

void expect_digits(const char* what, double value, double expected) {
  EXPECT_LT(measured(what, std::abs(value / expected - 1.0)), ten_digits)
      << what << " " << value << " against " << expected;
}

// Constant rate: N / T, standard error of its logarithm 1 / sqrt(N), log-likelihood
// N log(N / T) - N.
TEST(ClosedForms, ConstantRate) {
  RandomStream random(3, 0);
  constexpr Eigen::Index nodes = 500, spikes = 37;
  SpikeDesign design;
  design.nodes = RowMatrix::Ones(nodes, 1);
  design.spikes = RowMatrix::Ones(spikes, 1);
  design.weights_ms.resize(nodes);
  for (double& weight : design.weights_ms) {
    weight = 20.0 * random.uniform();
  }
  const double total = design.weights_ms.sum(), n = spikes;
  SpikeObjective objective(design, Escape{});
  const Minimum minimum = settled(objective, Vector::Zero(1));
  expect_digits("log rate", minimum.theta[0], std::log(n / total));
  expect_digits("standard error", standard_errors(minimum.hessian)[0], 1.0 / std::sqrt(n));
  expect_digits("log-likelihood", -minimum.value, n * std::log(n / total) - n);
}

/// 40 spikes in 20 s without current, 360 in 30 s at 0.1 nA.
struct TwoLevels {
  static constexpr double n0 = 40.0, n1 = 360.0, t0_s = 20.0, t1_s = 30.0, current_nA = 0.1;
  static double log_rate() { return std::log(n0 / t0_s); }  ///< of 1/s, without current
  static double slope() { return std::log((n1 / t1_s) / (n0 / t0_s)) / current_nA; }
  static double log_rate_error() { return 1.0 / std::sqrt(n0); }
  static double slope_error() { return std::sqrt(1.0 / n0 + 1.0 / n1) / current_nA; }
  static double log_likelihood() {  ///< rates in 1/s
    return n0 * std::log(n0 / t0_s) - n0 + n1 * std::log(n1 / t1_s) - n1;
  }
};

// The closed forms themselves, against numbers worked out beforehand with R and SciPy.
TEST(ClosedForms, TwoLevelNumbers) {
  EXPECT_NEAR(TwoLevels::log_rate(), 0.6931472, 5e-8);
  EXPECT_NEAR(TwoLevels::slope(), 17.917595, 5e-7);
  EXPECT_NEAR(TwoLevels::log_rate_error(), 0.1581139, 5e-8);
  EXPECT_NEAR(TwoLevels::slope_error(), 1.6666667, 5e-8);
  EXPECT_NEAR(TwoLevels::log_likelihood(), 522.292281, 5e-7);
}

void expect_two_levels(const Minimum& minimum, double response_per_nA) {
  const Vector errors = standard_errors(minimum.hessian);
  expect_digits("log rate", minimum.theta[0] - std::log(per_second), TwoLevels::log_rate());
  expect_digits("its error", errors[0], TwoLevels::log_rate_error());
  expect_digits("slope", minimum.theta[1] * response_per_nA, TwoLevels::slope());
  expect_digits("its error", errors[1] * response_per_nA, TwoLevels::slope_error());
  expect_digits("log-likelihood",
                -minimum.value - (TwoLevels::n0 + TwoLevels::n1) * std::log(per_second),
                TwoLevels::log_likelihood());
}

TEST(ClosedForms, TwoLevelCurrent) {
  SpikeDesign design;
  design.nodes.resize(5, 2);
  design.nodes << 1.0, 0.0, 1.0, 0.0, 1.0, 0.1, 1.0, 0.1, 1.0, 0.1;
  design.weights_ms.resize(5);
  design.weights_ms << 1.2e4, 0.8e4, 0.5e4, 1.7e4, 0.8e4;
  design.spikes = RowMatrix::Ones(400, 2);
  design.spikes.col(1).head(40).setZero();
  design.spikes.col(1).tail(360).setConstant(0.1);
  SpikeObjective objective(design, Escape{});
  expect_two_levels(settled(objective, Vector::Zero(2)), 1.0);
}

Sweep level(const std::string& name, double current_nA, double duration_ms, int spikes) {
  Sweep sweep;
  sweep.name = name;
  sweep.step_ms = 0.5;
  sweep.input.assign(static_cast<std::size_t>(std::round(duration_ms / sweep.step_ms)), current_nA);
  for (int i = 0; i < spikes; ++i) {
    sweep.spikes_ms.push_back(duration_ms * (i + 0.37) / spikes);
  }
  sweep.analysed = {{0.0, duration_ms}};
  return sweep;
}

const char* const intercept_only = R"(
[kappa]
family = "absent"
[eta]
family = "absent"
[theta_1]
family = "absent"
)";

// The same two levels as two recorded sweeps: exposure, cells, nodes and kernel responses must add
// nothing. A kernel exp(-s / tau) answers a constant current I with tau I.
TEST(ClosedForms, TwoLevelCurrentThroughTheQuadrature) {
  for (const char* kappa :
       {"family = \"exponentials\"\ncount = 1\ntime_constants_ms = [7]\nfit_time_constants = false",
        "family = \"steps\"\nedges_ms = [0, 7]"}) {
    SCOPED_TRACE(kappa);
    Recording recording;
    recording.cell = "two levels";
    recording.sweeps = {level("off", 0.0, 20e3, 40), level("on", 0.1, 30e3, 360)};
    const Variant variant =
        parse_variant(std::string("[kappa]\n") + kappa +
                          "\n[eta]\nfamily = \"absent\"\n[theta_1]\nfamily = \"absent\"\n"
                          "[refractory]\ngiven_ms = 0\n",
                      "v.toml");
    FitOptions options;
    options.before = Before::first_value;
    const Exposure exposure = make_exposure(recording, variant.refractory, 0.0, options);
    for (CellRule rule : {CellRule::midpoint, CellRule::two_point}) {
      NodePlan plan{&exposure, place_nodes(graded_cells(exposure, 3.3, rule)), 1000.0};
      CellObjective objective(Coordinates(variant, false, false), std::move(plan),
                              VoltageStatistics{}, 1);
      expect_two_levels(settled(objective, (Vector(2) << -6.0, 0.0).finished()), 7.0);
    }
  }
}

// Renewal with an absolute refractory time: the maximum-likelihood rate is n / (T - n t_abs). With
// 100 spikes in 10 s and 4 ms: 10.4166667 Hz.
TEST(ClosedForms, DeadTimeThroughTheWholeFit) {
  RandomStream random(4, 0);
  Recording recording;
  recording.cell = "dead time";
  recording.sweeps = {level("only", 0.0, 10e3, 100)};
  for (double& current : recording.sweeps[0].input) {
    current = random.normal();  // a fit asks for a signal that moves, even without kappa
  }
  Variant variant =
      parse_variant(std::string(intercept_only) + "[refractory]\ngiven_ms = 4\n", "v.toml");
  FitOptions options;
  options.before = Before::zero;
  const Estimate estimate = fit(recording, variant, options);
  ASSERT_EQ(estimate.status, FitStatus::converged) << estimate.status_sentence;
  const double n = 100.0, rate = n / (10e3 - n * 4.0 * (1.0 - 1e-9));
  EXPECT_NEAR(rate / per_second, 10.4166667, 5e-8);
  ASSERT_TRUE(estimate.threshold.value);
  expect_digits("threshold in units of Delta", *estimate.threshold.value, -std::log(rate));
  expect_digits("log-likelihood", estimate.spike_log_likelihood, n * std::log(rate) - n);
  expect_digits("that of a constant rate", estimate.constant_rate_log_likelihood,
                n * std::log(rate) - n);
  ASSERT_TRUE(estimate.threshold.low && estimate.threshold.high);
  expect_digits("interval", *estimate.threshold.high - *estimate.threshold.low,
                2.0 * normal_quantile_for(0.95) / std::sqrt(n));
  EXPECT_NEAR(estimate.model.refractory_ms, 4.0, 1e-8);
  EXPECT_EQ(estimate.spikes, 100u);
}

// The other escape functions, a constant rate: f(x) = N / (T lambda_0) has one root each.
TEST(ClosedForms, ConstantRateThroughEveryEscapeFunction) {
  constexpr double rate = 0.02;
  for (const Escape& escape :
       {Escape{EscapeKind::exponential, 0.5, 1.0}, Escape{EscapeKind::softplus, 0.5, 1.0},
        Escape{EscapeKind::logistic, 0.5, 1.0}, Escape{EscapeKind::rectified_power, 0.5, 3.0},
        Escape{EscapeKind::gaussian_tail, 0.5, 1.0}}) {
    SCOPED_TRACE(std::string(to_string(escape.kind)));
    SpikeDesign design;
    design.nodes = RowMatrix::Ones(10, 1);
    design.weights_ms = Vector::Constant(10, 500.0);
    design.spikes = RowMatrix::Ones(100, 1);
    SpikeObjective objective(design, escape);
    const Minimum minimum = settled(objective, Vector::Zero(1));
    expect_digits("rate", escape_rate(escape, minimum.theta[0]), rate);
    const double y = rate / escape.lambda_0_per_ms;
    if (escape.kind == EscapeKind::exponential) {
      expect_digits("x", minimum.theta[0], std::log(y));
    } else if (escape.kind == EscapeKind::softplus) {
      expect_digits("x", minimum.theta[0], std::log(std::expm1(y)));
    } else if (escape.kind == EscapeKind::logistic) {
      expect_digits("x", minimum.theta[0], std::log(y / (1.0 - y)));
    } else if (escape.kind == EscapeKind::rectified_power) {
      expect_digits("x", minimum.theta[0], std::log(std::expm1(std::cbrt(y))));
    }
  }
}

}  // namespace
}  // namespace softsill::reference

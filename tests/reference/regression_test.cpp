// The two discrete-row likelihoods against R's glm, run live (R Core Team, package stats).
#include <gtest/gtest.h>

#include <cmath>
#include <vector>

#include "estimator/fit/ceres_minimizer.hpp"
#include "softsill/random.hpp"
#include "tests/reference/r_script.hpp"
#include "tests/reference/spike_objective.hpp"

namespace softsill::reference {
namespace {

constexpr std::uint64_t seed = 20240611;

/// A small experiment: rows with unequal weights, covariates like filtered currents and decaying
/// spike histories, and counts drawn from the model.
struct Rows {
  Matrix x;
  Vector weights_ms;
  Vector counts;
};

enum class Law { poisson, at_most_one };

Rows draw_rows(Law law, double intercept) {
  constexpr Eigen::Index n = 3000, p = 6;
  RandomStream random(seed, law == Law::poisson ? 0 : 1);
  Vector truth(p);
  truth << intercept, 0.8, -0.5, 1.1, -1.6, 0.4;
  Rows rows{Matrix(n, p), Vector(n), Vector(n)};
  double fast = 0.0, slow = 0.0, history = 0.0;
  for (Eigen::Index i = 0; i < n; ++i) {
    const double current = random.normal();
    fast += 0.5 * (current - fast);
    slow += 0.05 * (current - slow);
    rows.x.row(i) << 1.0, fast, slow, 2.5 * fast * slow, history, 0.02 * current;
    rows.weights_ms[i] = 0.5 + 1.5 * random.uniform();
    const double expected = rows.weights_ms[i] * std::exp(rows.x.row(i).dot(truth));
    double count = 0.0;
    for (double time = random.exponential(); time < expected; time += random.exponential()) {
      count += 1.0;
    }
    rows.counts[i] = law == Law::poisson ? count : std::min(count, 1.0);
    history = 0.9 * history + rows.counts[i];
  }
  return rows;
}

/// The default stops 1e-9 nats short, 4e-5 standard errors: more than the bounds here.
MinimizerOptions to_the_last_digits() {
  MinimizerOptions options;
  options.decrement = 0.0;
  return options;
}

/// Rows chosen by how often each is to appear.
template <typename Often>
RowMatrix repeated(const Matrix& x, Often&& often) {
  std::vector<Eigen::Index> chosen;
  for (Eigen::Index i = 0; i < x.rows(); ++i) {
    chosen.insert(chosen.end(), static_cast<std::size_t>(often(i)), i);
  }
  return x(chosen, Eigen::all);
}

void give(const Rows& rows, const RScript& r) {
  r.give("x", rows.x);
  r.give("y", rows.counts);
  r.give("w", rows.weights_ms);
}

const char* const fit_in_r = R"(
X <- read_table('x'); y <- drop(read_table('y')); w <- drop(read_table('w'))
fit <- glm(y ~ X - 1 + offset(log(w)), family = FAMILY,
           control = glm.control(epsilon = 1e-14, maxit = 100))
say('coefficients', coef(fit))
say('standard_errors', sqrt(diag(vcov(fit))))
say('log_likelihood', logLik(fit))
)";

std::string r_code(const std::string& family) {
  std::string code = fit_in_r;
  return code.replace(code.find("FAMILY"), 6, family);
}

// Source of the expected values: R's glm(family = poisson), live. Rows carry the quadrature weights
// w, so the Poisson log-likelihood is ours + sum y log w - sum log y!.
TEST(Regression, PoissonWithLogLinkMatchesGlm) {
  SKIP_WITHOUT_R();
  const Rows rows = draw_rows(Law::poisson, -2.0);
  SpikeDesign design;
  design.nodes = rows.x;
  design.weights_ms = rows.weights_ms;
  design.spikes = repeated(rows.x, [&](Eigen::Index i) { return rows.counts[i]; });
  SpikeObjective objective(design, Escape{});
  const Minimum minimum = minimize(objective, Vector::Zero(rows.x.cols()), to_the_last_digits());
  ASSERT_TRUE(minimum.passed()) << minimum.report << " decrement " << minimum.decrement;
  double constant = 0.0;
  for (Eigen::Index i = 0; i < rows.counts.size(); ++i) {
    constant +=
        rows.counts[i] * std::log(rows.weights_ms[i]) - std::log(std::tgamma(rows.counts[i] + 1.0));
  }

  RScript r;
  give(rows, r);
  r.run(r_code("poisson"));
  EXPECT_LT(
      measured("coefficients, relative", worst_relative(minimum.theta, r.said("coefficients"))),
      1e-6);
  EXPECT_LT(measured("standard errors, relative",
                     worst_relative(standard_errors(minimum.hessian), r.said("standard_errors"))),
            1e-6);
  EXPECT_NEAR(-minimum.value + constant, r.number("log_likelihood"),
              1e-9 * std::abs(r.number("log_likelihood")));
  EXPECT_GT(rows.counts.maxCoeff(), 1.0) << "the design should hold rows with two spikes";
}

// Source of the expected values: R's glm(family = binomial(link = "cloglog")), live. Its standard
// errors come from the expected information; ours from the observed one differ, see below.
TEST(Regression, BinsWithAtMostOneSpikeMatchGlm) {
  SKIP_WITHOUT_R();
  const Rows rows = draw_rows(Law::at_most_one, -1.2);
  SpikeDesign design;
  design.nodes = repeated(rows.x, [&](Eigen::Index i) { return 1.0 - rows.counts[i]; });
  design.spikes = repeated(rows.x, [&](Eigen::Index i) { return rows.counts[i]; });
  design.weights_ms =
      repeated(rows.weights_ms, [&](Eigen::Index i) { return 1.0 - rows.counts[i]; });
  design.spike_bins_ms = repeated(rows.weights_ms, [&](Eigen::Index i) { return rows.counts[i]; });
  SpikeObjective objective(design, Escape{});
  const Minimum minimum = minimize(objective, Vector::Zero(rows.x.cols()), to_the_last_digits());
  ASSERT_TRUE(minimum.passed()) << minimum.report << " decrement " << minimum.decrement;
  const Matrix expected =
      objective.evaluate(minimum.theta, Want::derivatives_and_expected).expected;

  RScript r;
  give(rows, r);
  r.run(r_code("binomial(link = 'cloglog')"));
  EXPECT_LT(
      measured("coefficients, relative", worst_relative(minimum.theta, r.said("coefficients"))),
      1e-6);
  EXPECT_LT(measured("standard errors, relative",
                     worst_relative(standard_errors(expected), r.said("standard_errors"))),
            1e-6);
  EXPECT_NEAR(-minimum.value, r.number("log_likelihood"),
              1e-9 * std::abs(r.number("log_likelihood")));
  // Were the two kinds of information the same here, the check above could not tell them apart.
  EXPECT_GT(worst_relative(standard_errors(minimum.hessian), r.said("standard_errors")), 1e-4);
}

}  // namespace
}  // namespace softsill::reference

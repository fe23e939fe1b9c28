// Smoothing parameters by Laplace approximate marginal likelihood against mgcv's REML, run live
// (Wood 2011, JRSS B 73:3; Debian package r-cran-mgcv).
#include <gtest/gtest.h>

#include <Eigen/LU>
#include <cmath>
#include <numbers>
#include <vector>

#include "estimator/fit/smoothing.hpp"
#include "softsill/random.hpp"
#include "tests/reference/r_script.hpp"
#include "tests/reference/spike_objective.hpp"

namespace softsill::reference {
namespace {

constexpr std::uint64_t seed = 711;
constexpr Eigen::Index rows = 3000;
constexpr int functions = 10;

struct Design {
  SpikeDesign spikes;
  Matrix x;
  Vector counts;
  double constant = 0.0;  ///< Poisson log-likelihood minus ours
};

/// An intercept and two kernels on spline bases: one wavy, one nearly straight.
Design draw_design() {
  RandomStream random(seed, 0);
  const Basis basis = Basis::spline(100.0, 5.0, functions);
  Design d;
  d.x.resize(rows, 1 + 2 * functions);
  d.counts.resize(rows);
  d.spikes.weights_ms.resize(rows);
  std::vector<double> at(basis.size());
  std::vector<Eigen::Index> spiking;
  for (Eigen::Index i = 0; i < rows; ++i) {
    const double first = 100.0 * random.uniform(), second = 100.0 * random.uniform();
    d.x(i, 0) = 1.0;
    basis.values(first, at);
    d.x.row(i).segment(1, functions) = Eigen::Map<const Vector>(at.data(), functions).transpose();
    basis.values(second, at);
    d.x.row(i).tail(functions) = Eigen::Map<const Vector>(at.data(), functions).transpose();
    d.spikes.weights_ms[i] = 0.5 + random.uniform();
    const double predictor =
        -1.5 + std::exp(-first / 25.0) * std::sin(first / 6.0) * 1.5 - 1.2 * (1.0 - second / 100.0);
    const double expected = d.spikes.weights_ms[i] * std::exp(predictor);
    double count = 0.0;
    for (double time = random.exponential(); time < expected; time += random.exponential()) {
      count += 1.0;
      spiking.push_back(i);
    }
    d.counts[i] = count;
    d.constant += count * std::log(d.spikes.weights_ms[i]) - std::log(std::tgamma(count + 1.0));
  }
  d.spikes.nodes = d.x;
  d.spikes.spikes = d.x(spiking, Eigen::all);
  return d;
}

/// Effective degrees of freedom, diag((H + S)^-1 H).
Vector effective_degrees(const Penalised& objective, const Minimum& minimum) {
  const Matrix without = minimum.hessian - objective.penalty_matrix();
  return minimum.hessian.llt().solve(without).diagonal();
}

const char* const r_code = R"(
library(mgcv)
X <- read_table('x'); y <- drop(read_table('y')); w <- drop(read_table('w'))
S1 <- read_table('s1'); S2 <- read_table('s2')
fit <- gam(y ~ X - 1 + offset(log(w)), family = poisson, method = 'REML',
           paraPen = list(X = list(S1, S2, rank = c(10, 10))),
           control = gam.control(epsilon = 1e-13, maxit = 500, newton = list(conv.tol = 1e-10,
                                 maxNstep = 5, maxSstep = 2, maxHalf = 30, use.svd = FALSE)))
say('coefficients', coef(fit)); say('lambda', fit$sp); say('edf', fit$edf)
say('reml', fit$gcv.ubre)
say('gradient', fit$outer.info$grad); say('hessian', fit$outer.info$hess)
say('covariance', diag(vcov(fit)))
)";

struct Compared {
  Design design = draw_design();
  SpikeObjective likelihood{design.spikes, Escape{}};
  Penalised objective{likelihood,
                      {roughness_penalty("first", 1, functions),
                       roughness_penalty("second", 1 + functions, functions)}};
  RScript r;

  void run_r() {
    r.give("x", design.x);
    r.give("y", design.counts);
    r.give("w", design.spikes.weights_ms);
    const Eigen::Index n = design.x.cols();
    for (int k = 0; k < 2; ++k) {
      const Penalty& penalty = objective.penalties()[static_cast<std::size_t>(k)];
      Matrix whole = Matrix::Zero(n, n);
      whole.block(static_cast<Eigen::Index>(penalty.first),
                  static_cast<Eigen::Index>(penalty.first), functions, functions) = penalty.matrix;
      r.give(k == 0 ? "s1" : "s2", whole);
    }
    r.run(r_code);
  }
};

SmoothingOptions tight() {
  SmoothingOptions options;
  options.gradient = 1e-6;
  options.rounds = 500;
  options.minimizer.decrement = 0.0;
  return options;
}

// Source of the expected values: mgcv::gam(method = "REML", paraPen), live. Bounds: what is left of
// the gradient of the score, mgcv's as it reports it, ours as we ask for it and what rounding does
// to it, moves log lambda by (Hessian of the score)^-1 times that; mgcv reports that Hessian too.
TEST(Smoothing, MatchesMgcvReml) {
  SKIP_WITHOUT_R();
  Compared c;
  const Vector start = Vector::Zero(c.design.x.cols());
  const Smoothed smoothed = choose_smoothing(c.objective, start, tight());
  ASSERT_TRUE(smoothed.settled) << "rounds " << smoothed.rounds;
  ASSERT_TRUE(smoothed.minimum.passed());
  c.run_r();

  const Vector left = Eigen::Map<const Vector>(c.r.said("gradient").data(), 2).cwiseAbs();
  const Matrix curvature = Eigen::Map<const Matrix>(c.r.said("hessian").data(), 2, 2);
  ASSERT_LT(measured("mgcv's gradient left", left.maxCoeff()), 1e-6);
  const Matrix reach = curvature.inverse().cwiseAbs();
  const Vector allowed =
      reach * (left.array() + 1e-6 + rounding_in_errors(smoothed.minimum)).matrix();
  double worst_allowed = 0.0;
  for (int k = 0; k < 2; ++k) {
    const double ours = std::log(c.objective.penalties()[static_cast<std::size_t>(k)].lambda);
    const double theirs = std::log(c.r.said("lambda")[static_cast<std::size_t>(k)]);
    std::printf("measured: log lambda %d %.9g against %.9g, allowed %.1e\n", k + 1, ours, theirs,
                allowed[k]);
    // An interior optimum, or nothing was compared.
    EXPECT_LT(std::abs(theirs), 15.0);
    EXPECT_NEAR(ours, theirs, allowed[k]);
    worst_allowed = std::max(worst_allowed, allowed[k]);
  }
  // Coefficients move by less than a standard error per unit of log lambda.
  const Vector edf = effective_degrees(c.objective, smoothed.minimum);
  const Vector errors = standard_errors(smoothed.minimum.hessian);
  double worst_coefficient = 0.0, worst_edf = 0.0, worst_error = 0.0;
  for (Eigen::Index i = 0; i < edf.size(); ++i) {
    const auto at = static_cast<std::size_t>(i);
    worst_coefficient =
        std::max(worst_coefficient,
                 std::abs(smoothed.minimum.theta[i] - c.r.said("coefficients")[at]) / errors[i]);
    worst_edf = std::max(worst_edf, std::abs(edf[i] - c.r.said("edf")[at]));
    worst_error =
        std::max(worst_error, std::abs(errors[i] / std::sqrt(c.r.said("covariance")[at]) - 1.0));
  }
  const double bound = worst_allowed + rounding_in_errors(smoothed.minimum);
  EXPECT_LT(measured("coefficients, standard errors", worst_coefficient), bound);
  EXPECT_LT(measured("effective degrees of freedom", worst_edf), bound);
  EXPECT_LT(measured("Bayesian standard errors, relative", worst_error), bound);
}

// The score itself, constants included: mgcv's REML score is minus the log marginal likelihood of
// the counts. And the optimum: nowhere may mgcv have found a higher one.
TEST(Smoothing, TheScoreIsMgcvsScoreAndOursIsNotLower) {
  SKIP_WITHOUT_R();
  Compared c;
  const Vector start = Vector::Zero(c.design.x.cols());
  const Smoothed smoothed = choose_smoothing(c.objective, start, tight());
  c.run_r();
  for (int k = 0; k < 2; ++k) {
    c.objective.penalties()[static_cast<std::size_t>(k)].lambda =
        c.r.said("lambda")[static_cast<std::size_t>(k)];
  }
  const Minimum there = minimize(c.objective, start, tight().minimizer);
  ASSERT_TRUE(there.passed());
  const double at_theirs = log_marginal_likelihood(c.objective, there);
  const double scale = std::abs(at_theirs);
  EXPECT_LT(measured("score, relative",
                     std::abs(at_theirs + c.design.constant + c.r.number("reml")) / scale),
            1e-9);
  // The determinant in the score feels rounding in the coefficients to first order.
  EXPECT_GE(smoothed.log_marginal, at_theirs - rounding_in_errors(there));
  std::printf("measured: ours minus theirs %.2e nats\n", smoothed.log_marginal - at_theirs);
}

// The maximum is one: both neighbours of every smoothing parameter are lower.
TEST(Smoothing, IsAMaximum) {
  Compared c;
  const Vector start = Vector::Zero(c.design.x.cols());
  const Smoothed smoothed = choose_smoothing(c.objective, start, tight());
  ASSERT_TRUE(smoothed.settled);
  for (Penalty& penalty : c.objective.penalties()) {
    const double best = penalty.lambda;
    for (double factor : {0.99, 1.01}) {
      penalty.lambda = best * factor;
      const Minimum beside = minimize(c.objective, smoothed.minimum.theta, tight().minimizer);
      EXPECT_LT(log_marginal_likelihood(c.objective, beside), smoothed.log_marginal);
    }
    penalty.lambda = best;
  }
}

// The default stops within 0.05 nats per unit of log lambda of the same place.
TEST(Smoothing, DefaultToleranceComesCloseEnough) {
  Compared c;
  const Vector start = Vector::Zero(c.design.x.cols());
  const double best = choose_smoothing(c.objective, start, tight()).log_marginal;
  for (Penalty& penalty : c.objective.penalties()) {
    penalty.lambda = 1.0;
  }
  const Smoothed quick = choose_smoothing(c.objective, start, SmoothingOptions{});
  EXPECT_TRUE(quick.settled);
  EXPECT_LE(quick.log_marginal, best + 1e-9 * std::abs(best));
  EXPECT_LT(measured("nats lost by the default", best - quick.log_marginal), 0.05);
}

}  // namespace
}  // namespace softsill::reference

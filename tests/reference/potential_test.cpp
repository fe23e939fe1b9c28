// The likelihood of the potential: against the Gaussian density with its whole covariance matrix,
// and against R's arima and an explicit generalised least squares, run live.
#include <gtest/gtest.h>

#include <Eigen/Cholesky>
#include <cmath>
#include <numbers>
#include <vector>

#include "tests/fit/small_cell.hpp"
#include "tests/reference/r_script.hpp"
#include "tests/reference/spike_objective.hpp"

namespace softsill::reference {
namespace {

constexpr double tau_kappa_ms = 15.0, tau_eta_ms = 25.0;

Variant plan() {
  return parse_variant(R"(
[kappa]
family = "exponentials"
count = 1
time_constants_ms = [15]
fit_time_constants = false
[eta]
family = "exponentials"
count = 1
time_constants_ms = [25]
fit_time_constants = false
[theta_1]
family = "absent"
[voltage]
mask_before_ms = 2
mask_after_ms = 5
step_ms = 0.2
)",
                       "v.toml");
}

/// Neighbouring samples: covariates (1, kappa * I, eta, I) and the potential.
struct Segment {
  std::vector<Eigen::Vector4d> rows;
  std::vector<double> potential_mV;
};

/// The same samples that the program reads, found again from the definition: every 0.2 ms of each
/// window, not within (-2, 5) ms of a spike.
std::vector<Segment> segments_of(const Recording& recording) {
  std::vector<Segment> segments;
  for (const Sweep& sweep : recording.sweeps) {
    std::vector<double> response;
    const double decay = std::exp(-sweep.step_ms / tau_kappa_ms);
    double now = sweep.input.front() * tau_kappa_ms;
    for (double current : sweep.input) {
      response.push_back(now);
      now = now * decay + current * tau_kappa_ms * (1.0 - decay);
    }
    for (const Interval& window : sweep.analysed) {
      std::size_t sample = 0;
      while (sweep.start_ms + sweep.step_ms * static_cast<double>(sample) <
             window.begin_ms - 1e-9) {
        ++sample;
      }
      bool open = false;
      for (; sample < sweep.input.size(); sample += 2) {
        const double t = sweep.start_ms + sweep.step_ms * static_cast<double>(sample);
        if (t >= window.end_ms) {
          break;
        }
        double history = 0.0;
        bool masked = false;
        for (double spike : sweep.spikes_ms) {
          masked = masked || (t > spike - 2.0 && t < spike + 5.0);
          history += spike < t ? std::exp(-(t - spike) / tau_eta_ms) : 0.0;
        }
        if (masked) {
          open = false;
          continue;
        }
        if (!open) {
          segments.emplace_back();
          open = true;
        }
        segments.back().rows.emplace_back(1.0, response[sample], history, sweep.input[sample]);
        segments.back().potential_mV.push_back(sweep.voltage_mV[sample]);
      }
    }
  }
  return segments;
}

Matrix stationary_covariance(Eigen::Index n, double sigma, double rho) {
  Matrix covariance(n, n);
  for (Eigen::Index i = 0; i < n; ++i) {
    for (Eigen::Index j = 0; j < n; ++j) {
      covariance(i, j) = sigma * sigma * std::pow(rho, std::abs(i - j));
    }
  }
  return covariance;
}

/// Log density of all segments, each a stretch of its own.
double dense_log_density(const std::vector<Segment>& segments, double reference_mV,
                         const Eigen::Vector4d& v, double sigma, double rho) {
  double total = 0.0;
  for (const Segment& segment : segments) {
    const auto n = static_cast<Eigen::Index>(segment.rows.size());
    Vector residual(n);
    for (Eigen::Index i = 0; i < n; ++i) {
      const auto at = static_cast<std::size_t>(i);
      residual[i] = segment.potential_mV[at] - reference_mV - segment.rows[at].dot(v);
    }
    const Eigen::LLT<Matrix> factor(stationary_covariance(n, sigma, rho));
    const Vector whitened = factor.matrixL().solve(residual);
    total -=
        0.5 * (static_cast<double>(n) * std::log(2.0 * std::numbers::pi) + whitened.squaredNorm()) +
        Matrix(factor.matrixL()).diagonal().array().log().sum();
  }
  return total;
}

VoltageStatistics gather(const small::Cell& cell, double block_ms, int threads = 1) {
  return gather_voltage(Coordinates(cell.variant, true, true).voltage_columns(), cell.exposure,
                        cell.recording, cell.variant, 0.0, block_ms, threads);
}

// Source of the expected values: the multivariate normal density by Cholesky factorisation, with
// covariance sigma^2 rho^|i - j| within a segment. Time blocks must not show.
TEST(Potential, LikelihoodIsTheGaussianDensity) {
  const small::Cell cell(small::recording(), plan());
  const std::vector<Segment> segments = segments_of(cell.recording);
  ASSERT_GT(segments.size(), 20u);
  const Eigen::Vector4d v(-1.5, 0.4, -3.0, 2.0);
  double worst = 0.0;
  for (double block_ms : {37.0, 400.0, 1e6}) {
    const VoltageStatistics statistics = gather(cell, block_ms, 2);
    for (double sigma : {0.2, 3.0}) {
      for (double rho : {-0.4, 0.0, 0.7, 0.97}) {
        const double expected = dense_log_density(segments, statistics.reference_mV, v, sigma, rho);
        const double value =
            evaluate_voltage(statistics, v, std::log(sigma), std::atanh(rho)).log_likelihood;
        worst = std::max(worst, std::abs(value / expected - 1.0));
      }
    }
  }
  EXPECT_LT(measured("log density, relative", worst), 1e-11);
}

/// A quiet sweep, so that one segment holds everything.
Recording quiet() {
  Recording out;
  out.cell = "quiet";
  out.sweeps = {small::sweep("q", 0.0, 120.0, 4)};
  out.sweeps[0].spikes_ms = {119.85, 119.95};
  return out;
}

// Source of the expected values: R's arima(order = c(1, 0, 0), xreg, method = "ML"), live. Its
// likelihood is exact; its optimiser has numerical gradients, so its coefficients bound ours only
// through the likelihood that they reach: 2 (ours - theirs) is a squared distance in standard
// errors. The kernel fits this potential, so that rho stays well below 1: close to 1 arima's
// log-likelihood itself is off (R 4.2: by 4 nats at rho = 0.99995, against the dense density).
TEST(Potential, MatchesArimaByMaximumLikelihood) {
  SKIP_WITHOUT_R();
  const small::Cell cell(quiet(), plan());
  const std::vector<Segment> segments = segments_of(cell.recording);
  ASSERT_EQ(segments.size(), 1u);
  // No spike ever acts on this potential, so the column of eta is left out by holding it at 0.
  const VoltageStatistics statistics = gather(cell, 1e6);
  const auto n = static_cast<Eigen::Index>(segments[0].rows.size());
  Matrix table(n, 4);
  for (Eigen::Index i = 0; i < n; ++i) {
    const auto at = static_cast<std::size_t>(i);
    table.row(i) << segments[0].potential_mV[at] - statistics.reference_mV, segments[0].rows[at][0],
        segments[0].rows[at][1], segments[0].rows[at][3];
  }
  Matrix penalty = Matrix::Zero(4, 4);
  penalty(2, 2) = 1e12;
  const VoltageFit fit = fit_voltage(statistics, penalty);
  const double ours =
      evaluate_voltage(statistics, fit.v, fit.log_sigma, fit.atanh_rho).log_likelihood;
  ASSERT_EQ(fit.v[2], 0.0);

  RScript r;
  r.give("data", table);
  Matrix law(2, 1);
  law << std::exp(fit.log_sigma), std::tanh(fit.atanh_rho);
  r.give("law", law);
  r.run(R"(
data <- read_table('data'); X <- data[, 2:4]; V <- data[, 1]; n <- length(V)
fit <- arima(V, order = c(1, 0, 0), xreg = X, include.mean = FALSE, method = 'ML',
             optim.control = list(reltol = 1e-15, maxit = 2000))
say('rho', coef(fit)[1]); say('v', coef(fit)[-1])
say('innovation_variance', fit$sigma2); say('log_likelihood', fit$loglik)
law <- drop(read_table('law'))
W <- solve(law[1]^2 * toeplitz(law[2]^(0:(n - 1))))
C <- solve(t(X) %*% W %*% X)
say('gls', C %*% t(X) %*% W %*% V); say('gls_errors', sqrt(diag(C)))
)");
  // The likelihood itself, at R's own point.
  const double rho = r.number("rho");
  const double sigma = std::sqrt(r.number("innovation_variance") / (1.0 - rho * rho));
  const Eigen::Vector4d v(r.said("v")[0], r.said("v")[1], 0.0, r.said("v")[2]);
  const double theirs =
      evaluate_voltage(statistics, v, std::log(sigma), std::atanh(rho)).log_likelihood;
  EXPECT_LT(measured("log-likelihood at arima's estimate, relative",
                     std::abs(theirs / r.number("log_likelihood") - 1.0)),
            1e-10);
  const double behind = ours - theirs;
  EXPECT_GE(measured("nats by which arima stays behind", behind), -1e-9);
  EXPECT_LT(behind, 1e-6);

  const Vector ours_v = (Vector(3) << fit.v[0], fit.v[1], fit.v[3]).finished();
  const std::vector<Eigen::Index> used = {0, 1, 3};
  const Matrix information =
      evaluate_voltage(statistics, fit.v, fit.log_sigma, fit.atanh_rho).information(used, used);
  const Vector errors = standard_errors(information);
  double distance = 0.0;
  for (Eigen::Index i = 0; i < 3; ++i) {
    distance = std::max(distance,
                        std::abs(ours_v[i] - r.said("v")[static_cast<std::size_t>(i)]) / errors[i]);
  }
  EXPECT_LT(measured("coefficients from arima's, standard errors", distance),
            std::sqrt(2.0 * std::max(behind, 0.0)) + 1e-6);
  // Given sigma and rho, coefficients and their errors are closed forms.
  EXPECT_LT(
      measured("coefficients from least squares, relative", worst_relative(ours_v, r.said("gls"))),
      1e-8);
  EXPECT_LT(measured("standard errors, relative", worst_relative(errors, r.said("gls_errors"))),
            1e-8);
}

// Source of the expected values: the definition, counted sample by sample.
TEST(Potential, ReadsEveryWindowWithoutItsMasks) {
  const small::Cell cell(small::recording(), plan());
  const VoltageStatistics statistics = gather(cell, 400.0);
  double samples = 0.0, pairs = 0.0;
  for (const Segment& segment : segments_of(cell.recording)) {
    samples += static_cast<double>(segment.rows.size());
    pairs += static_cast<double>(segment.rows.size()) - 1.0;
  }
  EXPECT_EQ(statistics.total.samples, samples);
  EXPECT_EQ(statistics.total.pairs, pairs);
  EXPECT_NEAR(statistics.used_ms, 0.2 * samples, 1e-6);
}

}  // namespace
}  // namespace softsill::reference

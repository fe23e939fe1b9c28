// Basis functions and their responses against plain sums and closed forms.
#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <random>
#include <vector>

#include "estimator/model/exponential_responses.hpp"
#include "softsill/error.hpp"
#include "softsill/kernel.hpp"

namespace softsill {
namespace {

constexpr double step = 0.05;

std::vector<double> noise(std::size_t n, double mean) {
  std::mt19937_64 generator(7);
  std::normal_distribution<double> normal(mean, 0.2);
  std::vector<double> out(n);
  for (double& value : out) {
    value = normal(generator);
  }
  return out;
}

/// integral of basis_k(s) I(t - s) ds by eight-point Gauss-Legendre on every piece between samples
/// and knots: exact for the piecewise cubics, to rounding for the exponentials.
std::vector<double> plain_response(const Basis& basis, const std::vector<double>& input,
                                   double start, double before, double t, double reach) {
  static const double x[8] = {-0.9602898564975363, -0.7966664774136267, -0.5255324099163290,
                              -0.1834346424956498, 0.1834346424956498,  0.5255324099163290,
                              0.7966664774136267,  0.9602898564975363};
  static const double w[8] = {0.1012285362903763, 0.2223810344533745, 0.3137066458778873,
                              0.3626837833783620, 0.3626837833783620, 0.3137066458778873,
                              0.2223810344533745, 0.1012285362903763};
  std::vector<double> cuts = {0.0, reach};
  for (double knot : basis.knots_ms) {
    if (knot > 0.0 && knot < reach) {
      cuts.push_back(knot);
    }
  }
  for (std::size_t i = 0; i <= input.size(); ++i) {
    const double lag = t - (start + step * static_cast<double>(i));
    if (lag > 0.0 && lag < reach) {
      cuts.push_back(lag);
    }
  }
  for (double lag = 1.0; lag < reach; lag += 1.0) {
    cuts.push_back(lag);  // keeps the rule accurate where the input is held for long
  }
  std::sort(cuts.begin(), cuts.end());
  std::vector<double> sum(basis.size(), 0.0), at(basis.size());
  for (std::size_t c = 0; c + 1 < cuts.size(); ++c) {
    const double middle = 0.5 * (cuts[c] + cuts[c + 1]), half = 0.5 * (cuts[c + 1] - cuts[c]);
    const double position = std::floor((t - middle - start) / step);
    const double value = position < 0 ? before : input[static_cast<std::size_t>(position)];
    for (int g = 0; g < 8; ++g) {
      basis.values(middle + half * x[g], at);
      for (std::size_t k = 0; k < at.size(); ++k) {
        sum[k] += half * w[g] * at[k] * value;
      }
    }
  }
  return sum;
}

void expect_responses(const Basis& basis, double reach, double relative) {
  const std::vector<double> input = noise(12000, 0.7);
  const double start = 100.0;
  const std::vector<double> times = {100.0,  100.02, 101.3,  130.0, 130.05, 155.123,
                                     222.22, 383.7,  523.71, 640.0, 699.99, 700.0};
  std::vector<double> got(times.size() * basis.size());
  input_responses(basis, input, start, step, 0.4, times, got);
  for (std::size_t i = 0; i < times.size(); ++i) {
    const std::vector<double> want = plain_response(basis, input, start, 0.4, times[i], reach);
    for (std::size_t k = 0; k < basis.size(); ++k) {
      EXPECT_NEAR(got[i * basis.size() + k], want[k], relative * (std::abs(want[k]) + 0.05))
          << "time " << times[i] << " function " << k;
    }
  }
  Kernel kernel{basis, {}};
  for (std::size_t k = 0; k < basis.size(); ++k) {
    kernel.coefficients.push_back(std::sin(1.0 + static_cast<double>(k)));
  }
  const std::vector<double> filtered = filtered_input(kernel, input, start, step, 0.4, times);
  for (std::size_t i = 0; i < times.size(); ++i) {
    double want = 0.0;
    for (std::size_t k = 0; k < basis.size(); ++k) {
      want += kernel.coefficients[k] * got[i * basis.size() + k];
    }
    EXPECT_NEAR(filtered[i], want, relative * (std::abs(want) + 1.0));
  }
}

TEST(Responses, SplineMatchesPlainQuadrature) {
  expect_responses(Basis::spline(200.0, 1.0, 14), 200.0, 1e-9);
}
TEST(Responses, FineSplineLosesNoDigits) {
  expect_responses(Basis::spline(400.0, 0.3, 24), 400.0, 1e-8);
}
TEST(Responses, StepsMatchPlainQuadrature) {
  expect_responses(Basis::steps({0.0, 1.0, 2.5, 10.0, 80.0}), 80.0, 1e-10);
}
TEST(Responses, StepsMayStartLate) { expect_responses(Basis::steps({2.0, 3.0, 9.0}), 9.0, 1e-10); }
TEST(Responses, ExponentialsMatchPlainQuadrature) {
  expect_responses(Basis::exponentials({2.0, 15.0}), 600.0, 1e-9);
}

TEST(Responses, ConstantInputGivesTheIntegral) {
  const Basis basis = Basis::spline(150.0, 1.0, 14);
  const std::vector<double> input(8000, 2.0);
  const std::vector<double> times = {0.0, 17.3, 399.0};
  std::vector<double> got(times.size() * basis.size());
  input_responses(basis, input, 0.0, step, 2.0, times, got);
  const std::vector<double> area = basis.integrals();
  for (std::size_t i = 0; i < got.size(); ++i) {
    EXPECT_NEAR(got[i], 2.0 * area[i % basis.size()], 1e-10 * area[i % basis.size()]);
  }
}

TEST(Responses, LeakyIntegratorStepHasItsClosedForm) {
  // A step of I0 through kappa(s) = (R / tau) exp(-s / tau): R I0 (1 - exp(-t / tau)).
  const double resistance = 120.0, tau = 17.0;
  Kernel kernel{Basis::exponentials({tau}), {resistance / tau}};
  const std::vector<double> input(4000, 0.1);
  const std::vector<double> times = {0.0, 1.234, 50.0, 200.0};
  const std::vector<double> u = filtered_input(kernel, input, 0.0, step, 0.0, times);
  for (std::size_t i = 0; i < times.size(); ++i) {
    EXPECT_NEAR(u[i], resistance * 0.1 * -std::expm1(-times[i] / tau), 1e-11);
  }
}

TEST(Responses, SplineCanCarryAnExponential) {
  // Least distance of the default kappa basis to exp(-s / 15 ms), by dense collocation.
  const Basis basis = Basis::spline(150.0, 1.0, 14);
  double total = 0.0;
  std::vector<double> at(basis.size());
  for (double s = 0.0; s < 150.0; s += 0.01) {
    basis.values(s, at);
    for (double value : at) {
      EXPECT_GE(value, 0.0);
    }
    total += at[0] + at[1] + at[2] + at[3];
  }
  EXPECT_GT(total, 0.0);
  // Partition of unity holds until the left-out functions begin.
  basis.values(5.0, at);
  double sum = 0.0;
  for (double value : at) {
    sum += value;
  }
  EXPECT_NEAR(sum, 1.0, 1e-13);
  basis.values(149.9999, at);
  for (double value : at) {
    EXPECT_LT(value, 1e-9);
  }
}

TEST(Responses, HistoryMatchesPlainSum) {
  const std::vector<double> spikes = {5.0, 7.5, 30.0, 30.9, 250.0, 251.0};
  const std::vector<double> times = {1.0, 5.0, 5.00001, 7.5, 9.0, 30.95, 200.0, 404.9, 650.0};
  for (const Basis& basis : {Basis::spline(400.0, 2.0, 13), Basis::steps({1.0, 2.0, 40.0}),
                             Basis::exponentials({3.0, 90.0})}) {
    std::vector<double> got(times.size() * basis.size()), at(basis.size());
    history_responses(basis, spikes, times, got);
    for (std::size_t i = 0; i < times.size(); ++i) {
      std::vector<double> want(basis.size(), 0.0);
      for (double spike : spikes) {
        if (spike < times[i]) {
          basis.values(times[i] - spike, at);
          for (std::size_t k = 0; k < at.size(); ++k) {
            want[k] += at[k];
          }
        }
      }
      for (std::size_t k = 0; k < basis.size(); ++k) {
        EXPECT_NEAR(got[i * basis.size() + k], want[k], 1e-12) << times[i] << " " << k;
      }
    }
  }
}

TEST(Responses, MomentsAreDerivativesByTimeConstant) {
  const std::vector<double> input = noise(4000, 0.3);
  const std::vector<double> spikes = {3.0, 40.0, 44.0, 120.0};
  const std::vector<double> times = {2.0, 41.03, 150.0, 199.0};
  const double tau = 12.0, h = 1e-4;
  for (bool history : {false, true}) {
    auto moments = [&](double t) {
      std::vector<double> out(times.size() * 3);
      if (history) {
        history_exponential_moments(t, 3, spikes, times, out);
      } else {
        input_exponential_moments(t, 3, input, 0.0, step, 0.2, times, out);
      }
      return out;
    };
    const auto mid = moments(tau), up = moments(tau * std::exp(h)),
               down = moments(tau * std::exp(-h));
    for (std::size_t i = 0; i < times.size(); ++i) {
      const double first = (up[3 * i] - down[3 * i]) / (2 * h);
      const double second = (up[3 * i] - 2 * mid[3 * i] + down[3 * i]) / (h * h);
      const double scale = std::abs(mid[3 * i]) + 1e-6;
      EXPECT_NEAR(mid[3 * i + 1] / tau, first, 1e-6 * scale);
      EXPECT_NEAR(mid[3 * i + 2] / (tau * tau) - mid[3 * i + 1] / tau, second, 1e-4 * scale);
    }
  }
}

TEST(Basis, BadArgumentsSaySo) {
  EXPECT_THROW(Basis::spline(0.0, 1.0, 10), Error);
  EXPECT_THROW(Basis::spline(100.0, 1.0, 3), Error);
  EXPECT_THROW(Basis::steps({1.0}), Error);
  EXPECT_THROW(Basis::steps({1.0, 1.0}), Error);
  EXPECT_THROW(Basis::exponentials({}), Error);
  EXPECT_THROW(Basis::exponentials({-1.0}), Error);
  EXPECT_THROW(kernel_family_from("splin"), Error);
}

}  // namespace
}  // namespace softsill

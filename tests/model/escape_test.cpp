// Escape functions against their definitions in 100-digit arithmetic, and their derivatives against
// differences there and against automatic differentiation.
#include <gtest/gtest.h>

#include <ceres/jet.h>

#include <boost/math/special_functions/erf.hpp>
#include <boost/multiprecision/cpp_bin_float.hpp>
#include <cmath>
#include <limits>
#include <ostream>
#include <string>
#include <vector>

#include "estimator/model/gaussian_hazard.hpp"
#include "softsill/error.hpp"
#include "softsill/escape.hpp"

namespace softsill {

/// How googletest names a parameter.
void PrintTo(const Escape& escape, std::ostream* out) {
  *out << to_string(escape.kind) << " n = " << escape.exponent;
}

namespace {

using Wide = boost::multiprecision::cpp_bin_float_100;

const std::vector<Escape> all_escapes = {
    {EscapeKind::exponential, 1.0, 1.0},      {EscapeKind::exponential, 0.005, 1.0},
    {EscapeKind::softplus, 0.3, 1.0},         {EscapeKind::logistic, 0.5, 1.0},
    {EscapeKind::rectified_power, 0.02, 2.0}, {EscapeKind::rectified_power, 0.02, 0.7},
    {EscapeKind::rectified_power, 1e-3, 5.5}, {EscapeKind::gaussian_tail, 0.1, 1.0}};

/// Mills' ratio is 1 / (x + 1 / (x + 2 / (x + ...))) (Laplace); erfc serves where that is slow.
Wide wide_hazard(const Wide& x) {
  if (x > 12) {
    Wide tail = 0;
    for (int k = 2000; k >= 1; --k) {
      tail = k / (x + tail);
    }
    return x + tail;
  }
  const Wide pi = boost::math::constants::pi<Wide>();
  return exp(-x * x / 2) / sqrt(2 * pi) / (boost::math::erfc(x / sqrt(Wide(2))) / 2);
}

/// log(1 + exp(x)), by its series where even 100 digits would not do.
Wide wide_softplus(const Wide& x) {
  const Wide e = exp(-abs(x));
  Wide tail = 0;
  if (e < Wide("1e-10")) {
    for (int k = 12; k >= 1; --k) {
      tail = e * (Wide(1) / k - tail);
    }
  } else {
    tail = log(1 + e);
  }
  return x > 0 ? Wide(x + tail) : tail;
}

/// log f by its definition.
Wide wide_log_f(EscapeKind kind, const Wide& x, const Wide& log_n) {
  switch (kind) {
    case EscapeKind::exponential:
      return x;
    case EscapeKind::softplus:
      return log(wide_softplus(x));
    case EscapeKind::logistic:
      return -wide_softplus(-x);
    case EscapeKind::rectified_power:
      return exp(log_n) * wide_log_f(EscapeKind::softplus, x, 0);
    case EscapeKind::gaussian_tail:
      return log(wide_hazard(x));
  }
  return 0;
}

double relative(double value, const Wide& expected) {
  if (expected == 0) {
    return std::abs(value);
  }
  return static_cast<double>(abs((Wide(value) - expected) / expected));
}

class EscapeFunctions : public ::testing::TestWithParam<Escape> {};

struct Tolerance {
  double value, log, first, second;
};

void compare(const Escape& escape, double x, const Tolerance& tolerance) {
  const Wide log_n = log(Wide(escape.exponent)), log_scale = log(Wide(escape.lambda_0_per_ms));
  // Central differences with a step of 1e-25 leave 1e-50.
  const Wide h("1e-25");
  const auto at = [&](int i, int j) {
    return wide_log_f(escape.kind, Wide(x) + i * h, log_n + j * h);
  };
  const Wide centre = at(0, 0), right = at(1, 0), left = at(-1, 0), up = at(0, 1), down = at(0, -1);
  const Wide l = centre + log_scale;
  const Wide l_x = (right - left) / (2 * h);
  const Wide l_xx = (right - 2 * centre + left) / (h * h);
  const Wide l_n = (up - down) / (2 * h);
  const Wide l_nn = (up - 2 * centre + down) / (h * h);
  const Wide l_xn = (at(1, 1) - at(1, -1) - at(-1, 1) + at(-1, -1)) / (4 * h * h);
  const Wide rate = exp(l);

  const EscapeDerivatives d = escape_at(escape, x);
  const std::string where = std::string(to_string(escape.kind)) +
                            " n = " + std::to_string(escape.exponent) + " x = " + std::to_string(x);
  // Log values near 0 are compared absolutely.
  EXPECT_LT(std::abs(static_cast<double>(Wide(d.log) - l)),
            tolerance.log * std::max(1.0, std::abs(static_cast<double>(l))))
      << where;
  EXPECT_LT(relative(d.log_x, l_x), tolerance.first) << where;
  const bool linear = escape.kind == EscapeKind::exponential;
  // Where (log f)'' is below 1e-30 the differences have no digits left to judge.
  if (linear) {
    EXPECT_EQ(d.log_xx, 0.0);
  } else if (abs(l_xx) > Wide("1e-30")) {
    EXPECT_LT(relative(d.log_xx, l_xx), tolerance.second) << where;
  } else {
    EXPECT_LT(std::abs(d.log_xx), 1e-29) << where;
  }
  if (rate > Wide("1e-300") && rate < Wide("1e300")) {
    EXPECT_LT(relative(d.rate, rate), tolerance.value) << where;
    EXPECT_LT(relative(d.rate_x, rate * l_x), tolerance.value + tolerance.first) << where;
    const Wide r_xx = l_xx + l_x * l_x;
    if (abs(r_xx) > Wide("1e-30")) {
      EXPECT_LT(relative(d.rate_xx, rate * r_xx), tolerance.value + tolerance.second) << where;
    }
    EXPECT_LT(relative(escape_rate(escape, x), rate), tolerance.value) << where;
  }
  EXPECT_LT(std::abs(escape_log_rate(escape, x) - d.log),
            2.0 * tolerance.log * std::max(1.0, std::abs(d.log)))
      << where;
  if (escape.kind == EscapeKind::rectified_power) {
    EXPECT_LT(relative(d.log_n, l_n), tolerance.first + 1e-12) << where;
    EXPECT_LT(relative(d.log_nn, l_nn), tolerance.first + 1e-12) << where;
    EXPECT_LT(relative(d.log_xn, l_xn), tolerance.first) << where;
    if (rate > Wide("1e-300")) {
      const double loose = tolerance.value + tolerance.second + 1e-12;
      EXPECT_LT(relative(d.rate_n, rate * l_n), loose) << where;
      // 1 + log f can vanish: judged against the sum of its parts.
      EXPECT_LT(std::abs(static_cast<double>((Wide(d.rate_nn) / rate - (l_nn + l_n * l_n)) /
                                             (abs(l_nn) + l_n * l_n))),
                loose)
          << where;
      EXPECT_LT(std::abs(static_cast<double>((Wide(d.rate_xn) / rate - (l_xn + l_x * l_n)) /
                                             (abs(l_xn) + abs(l_x * l_n)))),
                loose)
          << where;
    }
  } else {
    EXPECT_EQ(d.rate_n, 0.0);
    EXPECT_EQ(d.rate_nn, 0.0);
    EXPECT_EQ(d.rate_xn, 0.0);
    EXPECT_EQ(d.log_n, 0.0);
    EXPECT_EQ(d.log_nn, 0.0);
    EXPECT_EQ(d.log_xn, 0.0);
  }
}

TEST_P(EscapeFunctions, OrdinaryArgumentsTo100Digits) {
  for (double x = -11.97; x < 14.0; x += 0.173) {
    compare(GetParam(), x, {2e-13, 1e-15, 2e-14, 2e-12});
  }
  for (double x : {-1e-3, -1e-9, 0.0, 1e-9, 1e-3, 7.9999999, 8.0, 8.0000001}) {
    compare(GetParam(), x, {2e-14, 1e-15, 2e-14, 2e-12});
  }
}

TEST_P(EscapeFunctions, FarArgumentsTo100Digits) {
  for (double x : {-740.0, -200.0, -37.3, -30.0, -20.0, 20.0, 30.0, 39.0, 41.0, 120.0, 700.0}) {
    compare(GetParam(), x, {5e-12, 1e-15, 2e-14, 2e-12});
  }
}

TEST_P(EscapeFunctions, FiniteAtExtremes) {
  for (double x : {-999999.0, -1e5, -1e4, -709.0, -708.0, 708.0, 1e4, 1e5, 999999.0}) {
    const EscapeDerivatives d = escape_at(GetParam(), x);
    for (double value : {d.log, d.log_x, d.log_xx, d.log_n, d.log_xn, d.log_nn}) {
      EXPECT_TRUE(std::isfinite(value)) << to_string(GetParam().kind) << " x = " << x;
    }
    if (GetParam().kind == EscapeKind::exponential && x > 709.0) {
      EXPECT_EQ(d.rate, std::numeric_limits<double>::infinity());
      continue;
    }
    for (double value : {d.rate, d.rate_x, d.rate_xx, d.rate_n, d.rate_xn, d.rate_nn}) {
      EXPECT_TRUE(std::isfinite(value)) << to_string(GetParam().kind) << " x = " << x;
    }
    EXPECT_GE(d.rate, 0.0);
    EXPECT_GE(d.log_x, 0.0);
    EXPECT_LE(d.log_xx, 0.0);
  }
}

TEST_P(EscapeFunctions, IncreasingAndOfTheClaimedCurvature) {
  const Escape escape = GetParam();
  double last_rate = -1.0, last_log = -std::numeric_limits<double>::infinity();
  for (double x = -37.0; x < 30.0; x += 0.01) {
    const EscapeDerivatives d = escape_at(escape, x);
    EXPECT_GE(d.rate, last_rate);
    EXPECT_GE(d.log, last_log);
    EXPECT_GT(d.rate, 0.0);
    EXPECT_LE(d.log_xx, 0.0) << "log-concave, x = " << x;
    if (escape_is_concave(escape.kind)) {
      EXPECT_GE(d.rate_xx, 0.0) << "convex, x = " << x;
    }
    last_rate = d.rate;
    last_log = d.log;
  }
}

// The functions once more, as templates, for automatic differentiation.
template <typename T>
T plain_f(EscapeKind kind, const T& x, const T& log_n) {
  using std::erfc;
  using std::exp;
  using std::log;
  switch (kind) {
    case EscapeKind::exponential:
      return exp(x);
    case EscapeKind::softplus:
      return log(1.0 + exp(x));
    case EscapeKind::logistic:
      return 1.0 / (1.0 + exp(-x));
    case EscapeKind::rectified_power:
      return exp(exp(log_n) * log(log(1.0 + exp(x))));
    case EscapeKind::gaussian_tail:
      return exp(-0.5 * x * x) * (2.0 * 0.39894228040143267794) / erfc(x * 0.70710678118654752440);
  }
  return x;
}

TEST_P(EscapeFunctions, AutomaticDifferentiation) {
  using Jet = ceres::Jet<double, 2>;
  const Escape escape = GetParam();
  for (double x = -6.0; x < 4.0; x += 0.31) {
    const double scale = escape.lambda_0_per_ms;
    const Jet rate = scale * plain_f(escape.kind, Jet(x, 0), Jet(std::log(escape.exponent), 1));
    const Jet log_rate = log(rate);
    const EscapeDerivatives d = escape_at(escape, x);
    EXPECT_NEAR(d.rate / rate.a, 1.0, 1e-11);
    EXPECT_NEAR(d.rate_x / rate.v[0], 1.0, 1e-11);
    EXPECT_NEAR(d.log_x, log_rate.v[0], 1e-11 * (1.0 + std::abs(x)));
    EXPECT_NEAR(d.log_n, log_rate.v[1], 1e-10 * (1.0 + std::abs(d.log_n)));
    EXPECT_NEAR(d.rate_n, rate.v[1], 1e-10 * std::abs(d.rate_n));
    // Second derivatives: automatic first derivatives of the analytic first ones are not to be had
    // (they are plain doubles), so central differences of them.
    constexpr double h = 1e-5;
    const EscapeDerivatives right = escape_at(escape, x + h), left = escape_at(escape, x - h);
    EXPECT_NEAR(d.rate_xx, (right.rate_x - left.rate_x) / (2 * h), 1e-8 * (d.rate_x + d.rate));
    EXPECT_NEAR(d.log_xx, (right.log_x - left.log_x) / (2 * h), 1e-8 * (1.0 + d.log_x));
    EXPECT_NEAR(d.rate_xn, (right.rate_n - left.rate_n) / (2 * h),
                1e-7 * (std::abs(d.rate_xn) + std::abs(d.rate_n)));
    EXPECT_NEAR(d.log_xn, (right.log_n - left.log_n) / (2 * h), 1e-7 * (1.0 + std::abs(d.log_n)));
  }
}

INSTANTIATE_TEST_SUITE_P(All, EscapeFunctions, ::testing::ValuesIn(all_escapes));

// Values anyone can check by hand.
TEST(Escape, ClosedForms) {
  const double ln2 = 0.69314718055994530942;
  EXPECT_DOUBLE_EQ(escape_rate({EscapeKind::exponential, 2.0, 1.0}, 0.0), 2.0);
  EXPECT_DOUBLE_EQ(escape_rate({EscapeKind::softplus, 2.0, 1.0}, 0.0), 2.0 * ln2);
  EXPECT_DOUBLE_EQ(escape_rate({EscapeKind::logistic, 2.0, 1.0}, 0.0), 1.0);
  EXPECT_DOUBLE_EQ(escape_rate({EscapeKind::rectified_power, 2.0, 3.0}, 0.0),
                   2.0 * ln2 * ln2 * ln2);
  // phi(0) / Phi(0) = sqrt(2 / pi); h(1) = 0.24197072 / 0.15865525 from tables of the normal law.
  EXPECT_DOUBLE_EQ(escape_rate({EscapeKind::gaussian_tail, 1.0, 1.0}, 0.0), 0.79788456080286535588);
  EXPECT_NEAR(escape_rate({EscapeKind::gaussian_tail, 1.0, 1.0}, 1.0), 0.24197072 / 0.15865525,
              2e-8);
}

// A rectified power with n = 1 is the softplus.
TEST(Escape, PowerOneIsSoftplus) {
  for (double x = -50.0; x < 50.0; x += 0.7) {
    const EscapeDerivatives a = escape_at({EscapeKind::softplus, 0.4, 1.0}, x);
    const EscapeDerivatives b = escape_at({EscapeKind::rectified_power, 0.4, 1.0}, x);
    EXPECT_NEAR(a.rate / b.rate, 1.0, 1e-13);
    EXPECT_NEAR(a.rate_xx / b.rate_xx, 1.0, 1e-13);
    EXPECT_DOUBLE_EQ(a.log, b.log);
    EXPECT_DOUBLE_EQ(a.log_xx, b.log_xx);
  }
}

TEST(Escape, NotANumberStaysNotANumber) {
  for (const Escape& escape : all_escapes) {
    const double nan = std::numeric_limits<double>::quiet_NaN();
    EXPECT_TRUE(std::isnan(escape_rate(escape, nan))) << to_string(escape.kind);
    EXPECT_TRUE(std::isnan(escape_at(escape, nan).log)) << to_string(escape.kind);
  }
}

TEST(Escape, WordsAreReadBackAndMistakesNamed) {
  for (EscapeKind kind : {EscapeKind::exponential, EscapeKind::softplus, EscapeKind::logistic,
                          EscapeKind::rectified_power, EscapeKind::gaussian_tail}) {
    EXPECT_EQ(escape_kind_from(std::string(to_string(kind))), kind);
  }
  try {
    escape_kind_from("exponental");
    FAIL() << "no error";
  } catch (const Error& error) {
    EXPECT_NE(std::string(error.what()).find("'exponental'"), std::string::npos);
    EXPECT_NE(std::string(error.what()).find("'exponential'"), std::string::npos);
  }
}

}  // namespace
}  // namespace softsill

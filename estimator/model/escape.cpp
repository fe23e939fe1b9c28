#include "softsill/escape.hpp"

#include <cmath>
#include <numbers>
#include <vector>

#include "estimator/model/gaussian_hazard.hpp"
#include "softsill/error.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {
namespace {

constexpr EscapeKind all_kinds[] = {EscapeKind::exponential, EscapeKind::softplus,
                                    EscapeKind::logistic, EscapeKind::rectified_power,
                                    EscapeKind::gaussian_tail};

/// log lambda_0; most fits hold lambda_0 at 1/ms, and a logarithm costs as much as the rest.
double log_scale(const Escape& escape) {
  return escape.lambda_0_per_ms == 1.0 ? 0.0 : std::log(escape.lambda_0_per_ms);
}

/// s = log(1 + e^x) and what its derivatives are made of, all to a few units in the last place.
struct Softplus {
  double value = 0.0;       ///< s
  double log = 0.0;         ///< log s
  double slope = 0.0;       ///< s' = 1 / (1 + e^-x)
  double complement = 0.0;  ///< 1 - s'
  double log_slope = 0.0;   ///< s' / s
  double excess = 0.0;      ///< s' / s - (1 - s') > 0, so (log s)'' = -log_slope * excess
};

/// 1 - log(1 + e) / e for 0 <= e <= 0.05, where the difference would lose digits.
double one_minus_log_ratio(double e) {
  constexpr int terms = 12;  // 0.05^12 / 13 = 2e-17
  double sum = 0.0;
  for (int k = terms; k >= 1; --k) {
    sum = e * (1.0 / (k + 1) - sum);
  }
  return sum;
}

Softplus softplus_at(double x) {
  Softplus s;
  const double e = std::exp(-std::abs(x));
  const double share = 1.0 / (1.0 + e);
  if (x > 0.0) {
    s.value = x + std::log1p(e);
    s.slope = share;
    s.complement = e * share;
    s.log = std::log(s.value);
    s.log_slope = s.slope / s.value;
    s.excess = s.log_slope - s.complement;
    return s;
  }
  s.slope = e * share;
  s.complement = share;
  if (e > 0.05) {
    s.value = std::log1p(e);
    s.log = std::log(s.value);
    s.log_slope = s.slope / s.value;
    s.excess = s.log_slope - s.complement;
    return s;
  }
  // With g = log(1 + e) / e: s = e g, s' / s = share / g, and 1 - g by its series.
  const double loss = one_minus_log_ratio(e);
  const double g = 1.0 - loss;
  s.value = e * g;
  s.log = x + std::log1p(-loss);
  s.log_slope = share / g;
  s.excess = s.log_slope * loss;
  return s;
}

double softplus_value(double x) {
  const double tail = std::log1p(std::exp(-std::abs(x)));
  return x > 0.0 ? x + tail : tail;
}

double log_softplus(double x) {
  if (x > -3.0) {
    return std::log(softplus_value(x));
  }
  return x + std::log1p(-one_minus_log_ratio(std::exp(x)));
}

EscapeDerivatives exponential_at(const Escape& escape, double x) {
  EscapeDerivatives d;
  d.rate = d.rate_x = d.rate_xx = escape.lambda_0_per_ms * std::exp(x);
  d.log = log_scale(escape) + x;
  d.log_x = 1.0;
  return d;
}

EscapeDerivatives softplus_derivatives(const Escape& escape, double x) {
  const Softplus s = softplus_at(x);
  EscapeDerivatives d;
  d.rate = escape.lambda_0_per_ms * s.value;
  d.rate_x = escape.lambda_0_per_ms * s.slope;
  d.rate_xx = d.rate_x * s.complement;
  d.log = log_scale(escape) + s.log;
  d.log_x = s.log_slope;
  d.log_xx = -s.log_slope * s.excess;
  return d;
}

EscapeDerivatives logistic_at(const Escape& escape, double x) {
  const double e = std::exp(-std::abs(x));
  const double share = 1.0 / (1.0 + e);
  const double value = x > 0.0 ? share : e * share;
  const double complement = x > 0.0 ? e * share : share;
  // 1 - 2f = -tanh(x / 2): from e where that keeps its digits.
  const double balance =
      std::abs(x) < 0.1 ? -std::tanh(0.5 * x) : (x > 0.0 ? e - 1.0 : 1.0 - e) * share;
  EscapeDerivatives d;
  d.rate = escape.lambda_0_per_ms * value;
  d.rate_x = d.rate * complement;
  d.rate_xx = d.rate_x * balance;
  d.log = log_scale(escape) + (x > 0.0 ? 0.0 : x) - std::log1p(e);
  d.log_x = complement;
  d.log_xx = -value * complement;
  return d;
}

EscapeDerivatives rectified_power_at(const Escape& escape, double x) {
  const Softplus s = softplus_at(x);
  const double n = escape.exponent;
  const double power = n * s.log;  // log f, and its derivative by log n
  EscapeDerivatives d;
  d.rate = escape.lambda_0_per_ms * std::exp(power);
  d.log = log_scale(escape) + power;
  d.log_x = n * s.log_slope;
  d.log_xx = -d.log_x * s.excess;
  d.log_n = power;
  d.log_xn = d.log_x;
  d.log_nn = power;
  d.rate_x = d.rate * d.log_x;
  d.rate_xx = d.rate_x * ((n - 1.0) * s.log_slope + s.complement);
  d.rate_n = d.rate * power;
  d.rate_nn = d.rate * power * (1.0 + power);
  d.rate_xn = d.rate_x * (1.0 + power);
  return d;
}

EscapeDerivatives gaussian_tail_at(const Escape& escape, double x) {
  const GaussianHazard h = gaussian_hazard(x);
  EscapeDerivatives d;
  d.rate = escape.lambda_0_per_ms * h.value;
  d.rate_x = d.rate * h.log_slope;
  d.rate_xx = d.rate * h.curvature;
  d.log = log_scale(escape) + h.log;
  d.log_x = h.log_slope;
  d.log_xx = h.log_curvature;
  return d;
}

}  // namespace

EscapeDerivatives escape_at(const Escape& escape, double x) {
  switch (escape.kind) {
    case EscapeKind::exponential:
      return exponential_at(escape, x);
    case EscapeKind::softplus:
      return softplus_derivatives(escape, x);
    case EscapeKind::logistic:
      return logistic_at(escape, x);
    case EscapeKind::rectified_power:
      return rectified_power_at(escape, x);
    case EscapeKind::gaussian_tail:
      return gaussian_tail_at(escape, x);
  }
  throw InternalError("unknown escape function");
}

double escape_rate(const Escape& escape, double x) {
  const double scale = escape.lambda_0_per_ms;
  switch (escape.kind) {
    case EscapeKind::exponential:
      return scale * std::exp(x);
    case EscapeKind::softplus:
      return scale * softplus_value(x);
    case EscapeKind::logistic:
      return scale / (1.0 + std::exp(-x));
    case EscapeKind::rectified_power:
      return scale * std::exp(escape.exponent * log_softplus(x));
    case EscapeKind::gaussian_tail:
      return scale * gaussian_hazard_value(x);
  }
  throw InternalError("unknown escape function");
}

double escape_log_rate(const Escape& escape, double x) {
  const double scale = log_scale(escape);
  switch (escape.kind) {
    case EscapeKind::exponential:
      return scale + x;
    case EscapeKind::softplus:
      return scale + log_softplus(x);
    case EscapeKind::logistic:
      return scale - softplus_value(-x);
    case EscapeKind::rectified_power:
      return scale + escape.exponent * log_softplus(x);
    case EscapeKind::gaussian_tail:
      return scale + gaussian_hazard(x).log;
  }
  throw InternalError("unknown escape function");
}

bool escape_is_concave(EscapeKind kind) {
  // A rectified power is convex only for n >= 1, and n may be free: several starts are the safe
  // answer.
  return kind == EscapeKind::exponential || kind == EscapeKind::softplus ||
         kind == EscapeKind::gaussian_tail;
}

std::string_view to_string(EscapeKind kind) {
  switch (kind) {
    case EscapeKind::exponential:
      return "exponential";
    case EscapeKind::softplus:
      return "softplus";
    case EscapeKind::logistic:
      return "logistic";
    case EscapeKind::rectified_power:
      return "rectified_power";
    case EscapeKind::gaussian_tail:
      return "gaussian_tail";
  }
  throw InternalError("unknown escape function");
}

EscapeKind escape_kind_from(const std::string& word) {
  std::vector<std::string_view> known;
  for (EscapeKind kind : all_kinds) {
    if (word == to_string(kind)) {
      return kind;
    }
    known.push_back(to_string(kind));
  }
  throw Error("", "", "unknown escape function '" + word + "'",
              "did you mean '" + nearest_word(word, known) + "'?");
}

}  // namespace softsill

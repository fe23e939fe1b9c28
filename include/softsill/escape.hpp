#pragma once

/// \file escape.hpp
/// Escape functions: the hazard lambda = lambda_0 f(x) as a function of the distance x to threshold
/// in units of its softness, x = (u - theta) / Delta.

#include <string>
#include <string_view>

namespace softsill {

/// The escape functions on offer. All are positive, increasing and free of overflow for every
/// finite x a fit can reach.
enum class EscapeKind {
  exponential,      ///< f = exp(x). lambda_0 and theta_0 say the same thing: lambda_0 stays fixed.
  softplus,         ///< f = log(1 + exp(x)). Convex and log-concave (Paninski 2004).
  logistic,         ///< f = 1 / (1 + exp(-x)); lambda_0 is the ceiling rate. Not convex.
  rectified_power,  ///< f = log(1 + exp(x))^n: a smooth [x]_+^n with exponent n > 0.
  gaussian_tail     ///< f = phi(x) / Phi(-x), the hazard of a Gaussian threshold: tail
                 ///< exp(-x^2 / 2) far below, linear far above; convex (Sampford 1953, Ann. Math.
                 ///< Stat. 24:130) and log-concave. Gaussian escape rates for diffusive noise:
                 ///< Plesser & Gerstner 2000, Neural Comput. 12:367.
};

/// An escape function with its own parameters fixed to numbers.
struct Escape {
  EscapeKind kind = EscapeKind::exponential;
  double lambda_0_per_ms = 1.0;  ///< rate scale, 1/ms; for `logistic` the ceiling rate
  double exponent = 1.0;         ///< n of `rectified_power`, at most 50; ignored by the others

  bool operator==(const Escape&) const = default;
};

/// Value and derivatives of lambda(x) and log lambda(x). The own parameters are
/// a = (log lambda_0, log n); subscripts x and n mean derivatives by x and by log n.
/// Derivatives by log lambda_0 need no field: d lambda = lambda, d log lambda = 1.
struct EscapeDerivatives {
  double rate = 0, rate_x = 0, rate_xx = 0;     ///< lambda, 1/ms
  double log = 0, log_x = 0, log_xx = 0;        ///< log(lambda * 1 ms)
  double rate_n = 0, rate_xn = 0, rate_nn = 0;  ///< 0 unless rectified_power
  double log_n = 0, log_xn = 0, log_nn = 0;     ///< 0 unless rectified_power
};

/// All of the above at x. Finite for every finite x with |x| < 1e6, except that the exponential's
/// rate is +infinity above x = 709; log and its derivatives stay finite there.
EscapeDerivatives escape_at(const Escape& escape, double x);

/// lambda(x) alone, 1/ms.
double escape_rate(const Escape& escape, double x);
/// log(lambda(x) * 1 ms) alone.
double escape_log_rate(const Escape& escape, double x);

/// True where the log-likelihood is concave in the linear parameters for fixed own parameters
/// (f convex and log-concave, Paninski 2004, Network 15:243).
bool escape_is_concave(EscapeKind kind);

/// "exponential", "softplus", ... as written in variant files and results.
std::string_view to_string(EscapeKind kind);
/// Inverse of to_string. \throws Error naming the nearest known word.
EscapeKind escape_kind_from(const std::string& word);

}  // namespace softsill

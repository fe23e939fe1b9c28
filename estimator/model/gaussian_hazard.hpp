#pragma once

/// \file gaussian_hazard.hpp
/// The hazard of a standard Gaussian, h(x) = phi(x) / Phi(-x) (the inverse of Mills' ratio),
/// without loss of digits in either tail.

namespace softsill {

struct GaussianHazard {
  double value = 0.0;          ///< h
  double log = 0.0;            ///< log h
  double log_slope = 0.0;      ///< (log h)' = h - x
  double log_curvature = 0.0;  ///< (log h)'' = h (h - x) - 1, negative
  double curvature = 0.0;      ///< h'' / h = (h - x)(2 h - x) - 1, positive (Sampford 1953)
};

/// All of the above. Relative error under 1e-13 of value, log_slope and log_curvature where the
/// value is above 1e-300, under 1e-12 of curvature; finite for every finite x.
GaussianHazard gaussian_hazard(double x);

/// h(x) alone.
double gaussian_hazard_value(double x);

}  // namespace softsill

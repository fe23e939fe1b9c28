#pragma once

/// \file uncertainty.hpp
/// Intervals from a minimum that has passed the gate.

#include <Eigen/Core>
#include <functional>
#include <optional>

#include "estimator/fit/ceres_minimizer.hpp"

namespace softsill {

/// Inverse of the Hessian over free coordinates; rows and columns of fixed ones are 0.
Matrix inverse_information(const Matrix& hessian, const std::vector<bool>& fixed);

/// Robust (sandwich) covariance V J V, J from scores summed over time blocks longer than the
/// history (Huber 1967; White 1982, Econometrica 50:1). `scores` is blocks x coordinates.
Matrix sandwich_covariance(const Matrix& covariance, const Matrix& scores);

/// Two-sided standard normal quantile for a level, e.g. 1.96 for 0.95.
double normal_quantile_for(double level);

/// Ends of a profile-likelihood interval of one coordinate; an end is empty when the likelihood
/// does not fall far enough within `reach` standard errors (the data do not bound it on that side).
struct ProfileInterval {
  std::optional<double> low, high;
  int fits = 0;  ///< maximisations spent
};

/// Where 2 (max - profile) reaches the chi-square quantile of `level` with one degree of freedom
/// (Venzon & Moolgavkar 1988, Appl. Stat. 37:87, for the principle), found by the secant rule on
/// the signed root. Smoothing parameters stay as chosen.
ProfileInterval profile_interval(Objective& objective, const Minimum& minimum,
                                 const Matrix& covariance, Eigen::Index coordinate, double level,
                                 const MinimizerOptions& options);

/// Standard error of a smooth function of the coordinates by the delta method.
double delta_standard_error(const Vector& gradient, const Matrix& covariance);

}  // namespace softsill

#pragma once

/// \file equations.hpp
/// The integrate-and-fire equations that a model with exponential kernels integrates, for people
/// who simulate networks.
///
/// One exponential in kappa, a exp(-s / tau_m), is a leaky membrane with R = a tau_m and C = 1 / a:
///
///     tau_m du/dt = -(u - E_0) + R I - R (w_1 + w_2 + ...)
///     tau_w_k dw_k/dt = -w_k
///     at a spike: u <- u + J, w_k <- w_k + b_k
///
/// A term A_k exp(-s / tau_k) of eta is what an adaptation current leaves in u when
/// b_k = -A_k (tau_k - tau_m) / (R tau_k) and the jump of u is J = eta(0) (found by putting
/// eta = sum A_k exp(-s / tau_k) into the equation for u after a spike; the free part of the
/// solution, exp(-s / tau_m), takes up what J leaves over). A term of eta with tau_k = tau_m needs
/// no current: it is a jump of u alone, and b_k = 0 says so.
///
/// Several exponentials in kappa are parallel low-pass filters y_j of the current, and each term of
/// eta then decays in u by itself: u = E_0 + sum y_j + sum z_k.
///
/// Exponentials in theta_1 are jumps of the threshold. During the absolute refractory time all
/// equations run on; only the hazard is 0.

#include <string>
#include <vector>

#include "softsill/model.hpp"

namespace softsill {

/// One line of equations.csv. `equation` is empty for plain parameters.
struct EquationRow {
  std::string symbol;
  double value = 0.0;
  std::string unit;
  std::string meaning;
  std::string equation;
};

/// Why a model has no such equations, in one sentence; empty when it has.
std::string why_no_equations(const Model& model);

/// All parameters and equations; empty exactly when why_no_equations() is not.
std::vector<EquationRow> integrate_and_fire_equations(const Model& model);

/// symbol,value,unit,meaning,equation with one line per row (RFC 4180 quoting).
std::string equations_csv(const std::vector<EquationRow>& rows);

}  // namespace softsill

#pragma once

/// \file model_file.hpp
/// A model with numbers for everything, written by hand.
///
///     name = "regular cell"
///     scale = "millivolt"              # default; or "noise_level": all in units of Delta
///     input_unit = "nA"                # default
///     resting_potential_mV = -65       # E_0; not with scale = "noise_level", where it is 0
///     threshold_mV = -48               # theta_0; `threshold` with scale = "noise_level"
///     noise_level_mV = 1.5             # Delta; not with scale = "noise_level", where it is 1
///     refractory_ms = 2                # t_abs, default 0
///
///     [escape]                         # default: exponential with lambda_0 = 1/ms
///     function = "exponential"
///     lambda_0_per_ms = 1
///
///     [kappa]                          # one exponential: the membrane as a resistor and capacitor
///     resistance_MOhm = 100
///     tau_m_ms = 20
///
///     [eta]                            # a sum of exponentials
///     family = "exponentials"
///     amplitudes = [-12, -2]           # value at lag 0, mV (kappa: mV/(nA ms))
///     time_constants_ms = [20, 150]
///
///     [theta_1]                        # piecewise constant
///     family = "steps"
///     edges_ms = [0, 5, 20, 80]
///     values = [10, 4, 1]
///
/// A kernel that is left out, or has family = "absent", is 0. A spline kernel has family =
/// "spline", coefficients and either support_ms, first_ms and count (as in a variant) or knots_ms.

#include <string>

#include "softsill/model.hpp"

namespace softsill {

/// Reads a model file. \throws Error with line, key and the nearest known key
Model read_model(const std::string& path);
/// The same from text; `path` is used in messages only.
Model parse_model(const std::string& text, const std::string& path);
/// Writes what read_model reads; reading it back gives the same model, digit for digit.
std::string to_toml(const Model& model);

}  // namespace softsill

#pragma once

/// \file variant.hpp
/// A model variant: which kernels are present and how they are built, which escape function, what
/// is fitted. A variant is data (a TOML file), never a code path.

#include <optional>
#include <string>
#include <vector>

#include "softsill/escape.hpp"
#include "softsill/kernel.hpp"

namespace softsill {

/// How one kernel is to be estimated.
struct KernelPlan {
  KernelFamily family = KernelFamily::spline;
  double support_ms = 200.0;     ///< spline: where the kernel must have reached 0
  double first_ms = 1.0;         ///< spline: lag below which knots are evenly spaced
  int count = 14;                ///< spline: basis functions; exponentials: how many
  std::vector<double> edges_ms;  ///< steps
  /// exponentials: starting values, empty for automatic ones spread over the allowed range
  std::vector<double> time_constants_ms;
  bool fit_time_constants = true;
  double shortest_ms = 0.5;  ///< exponentials: allowed range of time constants
  double longest_ms = 500.0;
  /// exponentials, eta only: one more exponential that shares kappa's membrane time constant
  bool with_membrane = false;

  bool operator==(const KernelPlan&) const = default;
};

/// The absolute refractory time t_abs.
struct RefractoryPlan {
  /// Given value in ms; empty: estimated as the shortest interval, at most cap_ms.
  std::optional<double> given_ms;
  double cap_ms = 4.0;

  bool operator==(const RefractoryPlan&) const = default;
};

/// How smoothing parameters of spline kernels are found.
struct SmoothingPlan {
  /// true: Laplace approximate marginal likelihood (Wood 2011). false: the given ones.
  bool automatic = true;
  double kappa = 1.0, eta = 1.0, theta_1 = 1.0;  ///< used when not automatic

  bool operator==(const SmoothingPlan&) const = default;
};

struct Variant {
  std::string name = "default";
  KernelPlan kappa;
  KernelPlan eta;
  KernelPlan theta_1;
  Escape escape;              ///< kind and fixed or starting values of own parameters
  bool fit_lambda_0 = false;  ///< never for the exponential
  bool fit_exponent = false;  ///< rectified_power only
  RefractoryPlan refractory;
  SmoothingPlan smoothing;
  bool use_voltage = true;      ///< false: spikes alone even where the potential was recorded
  double mask_before_ms = 2.0;  ///< potential left out this long before each spike ...
  double mask_after_ms = 5.0;   ///< ... and this long after it
  /// The potential is read at this step (a whole number of samples). Finer costs time and narrows
  /// the band of kappa near lag 0 only: by a fifth at 0.2 ms on a cell with 2 ms of noise
  /// correlation.
  double voltage_step_ms = 0.5;

  /// The default variant: spline kernels, kappa over 150 ms, eta and theta_1 over 800 ms; the
  /// exponential escape function.
  Variant();

  bool operator==(const Variant&) const = default;
};

/// Reads a variant file. What the file does not say is as in Variant(). An example with every
/// table:
///
///     name = "membrane and two adaptation currents"
///     [kappa]
///     family = "exponentials"        # or "spline", "steps", "absent"
///     count = 1                      # 1 to 5
///     time_constants_ms = [15]       # optional starting values
///     [eta]
///     family = "exponentials"
///     count = 2
///     fit_time_constants = false     # then time_constants_ms must be given
///     time_constants_ms = [30, 200]
///     with_membrane = true
///     [theta_1]
///     family = "spline"
///     support_ms = 400               # where the kernel has reached 0
///     first_ms = 2                   # lag below which knots are evenly spaced
///     count = 13
///     [escape]
///     function = "rectified_power"
///     lambda_0_per_ms = 1            # or "fit" (then lambda_0_start_per_ms is where it starts)
///     exponent = "fit"               # or a number; exponent_start is where it starts
///     [refractory]
///     given_ms = 2                   # left out: the shortest interval, at most cap_ms
///     [voltage]
///     use = true
///     mask_before_ms = 2
///     mask_after_ms = 5
///     step_ms = 0.2
///     [smoothing]
///     automatic = false              # then kappa, eta, theta_1 are smoothing parameters
///     theta_1 = 10
///
/// lambda_0 left out is 1/ms for all functions but the logistic, whose ceiling is fitted; an
/// exponent left out is fitted. \throws Error with line, key and the nearest known key.
Variant read_variant(const std::string& path);
/// The same from text; `path` is used in messages only.
Variant parse_variant(const std::string& text, const std::string& path);
/// Writes what read_variant reads; reading it back gives an equal variant (settings that the chosen
/// families and functions do not use go back to their defaults).
std::string to_toml(const Variant& variant);

}  // namespace softsill

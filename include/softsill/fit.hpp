#pragma once

/// \file fit.hpp
/// Maximum-likelihood estimation of an escape-noise model from one recorded cell.

#include <cstdint>
#include <functional>
#include <optional>
#include <string>

#include "softsill/estimate.hpp"
#include "softsill/kernel.hpp"
#include "softsill/recording.hpp"
#include "softsill/variant.hpp"

namespace softsill {

/// A number from outside that fixes the mV scale of a fit to spikes alone.
struct Anchor {
  enum class What { resistance, noise_level };
  What what = What::resistance;
  double value = 0.0;           ///< MOhm or mV
  double standard_error = 0.0;  ///< same unit; 0 means exactly known
};

/// Reads "resistance=120±8MOhm" or "noise_level=1.5±0.2mV" ("+-" may stand for the sign).
/// \throws Error on anything else
Anchor parse_anchor(const std::string& text);

struct FitOptions {
  /// What the input was before each sweep. Empty: unknown, so the first kernel support of every
  /// sweep is left out of the likelihood.
  std::optional<Before> before;
  double holding = 0.0;          ///< input unit, with Before::holding
  std::optional<Anchor> anchor;  ///< ignored (with a note) when the voltage is used
  int starts = 5;                ///< where the likelihood is not concave
  int max_iterations = 200;      ///< of one maximisation
  std::uint64_t seed = 1;        ///< of the extra starts
  int threads = 0;               ///< 0: all cores. Results do not depend on it.
  double level = 0.95;           ///< of all intervals
  /// Called now and then with a share in [0, 1] and a few words; return false to stop the fit,
  /// which then ends with FitStatus::interrupted. May be empty.
  std::function<bool(double, const std::string&)> progress;
};

/// Fits `variant` to the sweeps marked Use::estimate.
/// \throws Error when the data cannot be fitted at all (no spikes, one spike, constant input, no
///         time left after lead-ins); numerical trouble is a status of the result.
Estimate fit(const Recording& recording, const Variant& variant, const FitOptions& options = {});

}  // namespace softsill

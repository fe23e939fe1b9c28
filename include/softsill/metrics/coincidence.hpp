#pragma once

/// \file coincidence.hpp
/// The coincidence factor Gamma (Kistler, Gerstner & van Hemmen 1997, Neural Comput. 9:1015;
/// Jolivet et al. 2008, J. Neurosci. Methods 169:417):
///
///     Gamma = (C - C_chance) / ((N_reference + N_predicted) / 2) / (1 - C_chance / N_reference),
///     C_chance = 2 nu D N_reference, nu = N_predicted / T.
///
/// D is the half width of the coincidence window. Two spikes coincide when they are at most D
/// apart (plus 1e-9 ms, so that times on a sampling grid do not depend on rounding). The papers do
/// not settle how spikes are counted, so the rule is part of every result. Gamma is not symmetric:
/// the reference train is the recorded one.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "softsill/metrics/train.hpp"

namespace softsill::metrics {

enum class CountingRule {
  /// A spike is used once; pairs are made in time order, and no other way of pairing makes more.
  /// Identical trains have 1 and nothing exceeds it, but independent Poisson trains have a negative
  /// mean (about -0.11 at 40 Hz and D = 4 ms).
  one_to_one,
  /// Every pair within D counts: independent Poisson trains have mean 0, but bursts exceed 1.
  pairs,
  /// Reference spikes with at least one predicted spike within D.
  at_least_one
};

enum class ChanceTerm {
  formula,   ///< 2 nu D N_reference, exact for Poisson trains and counting of pairs
  simulated  ///< mean count of Poisson trains with N_predicted spikes, by the same counting rule
};

struct CoincidenceSettings {
  double window_ms = 4.0;  ///< D, half width
  CountingRule rule = CountingRule::one_to_one;
  ChanceTerm chance = ChanceTerm::formula;
  std::size_t chance_draws = 200;  ///< simulated chance term only
  std::uint64_t seed = 1;          ///< simulated chance term only
};

struct Coincidence {
  /// Gamma; empty when it is undefined, and then `absence` says why.
  std::optional<double> gamma;
  std::string absence;
  double coincidences = 0.0;  ///< C
  double chance = 0.0;        ///< C_chance
  std::size_t reference_spikes = 0, predicted_spikes = 0;
  std::string convention;  ///< one line: counting, chance term, whose rate
};

/// Gamma of `predicted` against `reference`.
///
/// Undefined when both trains are empty, or when chance alone would make every reference spike
/// coincide (2 nu D >= 1). An empty reference train has Gamma 0: no coincidences, none expected.
/// \throws Error on bad trains, a window that is not positive, or no draws
Coincidence coincidence_factor(Train reference, Train predicted, const Window& window,
                               const CoincidenceSettings& settings = {});

/// "+-4 ms, one-to-one in time order, chance 2 nu D N_reference with nu the predicted rate"
std::string describe(const CoincidenceSettings& settings);

/// Number of coincidences alone, by the counting rule of the settings.
double count_coincidences(Train reference, Train predicted, double window_ms, CountingRule rule);

}  // namespace softsill::metrics

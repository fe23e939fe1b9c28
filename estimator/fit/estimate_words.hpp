#pragma once

/// \file estimate_words.hpp
/// The words of estimate.json, in one place for writing and reading.

#include <array>
#include <string_view>
#include <utility>

#include "softsill/error.hpp"
#include "softsill/estimate.hpp"

namespace softsill {

inline constexpr std::array status_words = {
    std::pair{FitStatus::converged, "converged"},
    std::pair{FitStatus::at_boundary, "at_boundary"},
    std::pair{FitStatus::converged_imprecise, "converged_imprecise"},
    std::pair{FitStatus::not_converged, "not_converged"},
    std::pair{FitStatus::interrupted, "interrupted"},
    std::pair{FitStatus::failed, "failed"}};
inline constexpr std::array mode_words = {
    std::pair{FitMode::spikes_and_voltage, "spikes_and_voltage"},
    std::pair{FitMode::spikes_anchored, "spikes_anchored"},
    std::pair{FitMode::spikes_alone, "spikes_alone"}};
inline constexpr std::array scale_words = {std::pair{PotentialScale::millivolt, "millivolt"},
                                           std::pair{PotentialScale::noise_level, "noise_level"}};

/// \throws InternalError for a value that is not in the table
template <typename Words, typename Value>
std::string_view word_of(const Words& words, Value value) {
  for (const auto& [known, word] : words) {
    if (known == value) {
      return word;
    }
  }
  throw InternalError("a value without a word");
}

}  // namespace softsill

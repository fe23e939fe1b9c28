#pragma once

/// \file estimate_text.hpp
/// What `softsill fit` prints: an estimate as a person reads it, within the page.

#include <string>

#include "softsill/estimate.hpp"
#include "softsill/recording.hpp"

namespace softsill::cli {

/// How many spikes each sweep holds and where they come from, one line per kind of sweep.
std::string spikes_text(const Recording& recording);

/// Status, numbers with intervals, kernels, how far it can be trusted, limits and notes.
std::string estimate_text(const Estimate& estimate);

}  // namespace softsill::cli

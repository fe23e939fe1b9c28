#pragma once

// How well a fitted model tells spikes that it has not seen, computed the plain way: the hazard on
// a fine grid under the true past, from nothing but the model's numbers.

#include <cstdint>
#include <vector>

#include "softsill/model.hpp"
#include "softsill/recording.hpp"

namespace softsill::test {

/// Log-likelihood (nats, rates in 1/ms) of the spikes in consecutive blocks of a window.
struct BlockScores {
  std::vector<double> model;     ///< under the model
  std::vector<double> constant;  ///< under the window's own best constant rate
  std::vector<double> spikes;
};

/// \param before_value input before the first sample
BlockScores score_blocks(const Model& model, const Sweep& sweep, double before_value,
                         const Interval& window, std::size_t blocks);

/// (model - constant) / spikes / log 2 over the blocks, and the percentile interval from resampling
/// blocks with replacement (Kuensch 1989, Ann. Stat. 17:1217, with blocks that do not overlap).
struct BitsPerSpike {
  double value = 0.0, low = 0.0, high = 0.0;
};
BitsPerSpike bits_per_spike(const BlockScores& scores, std::uint64_t seed, int resamples = 4000,
                            double level = 0.95);

}  // namespace softsill::test

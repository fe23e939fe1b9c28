#pragma once

/// \file pairs.hpp
/// A measure between every train of one set and every train of another.

#include <cstddef>
#include <string>
#include <vector>

#include "softsill/metrics/coincidence.hpp"
#include "softsill/metrics/distances.hpp"
#include "softsill/metrics/train.hpp"

namespace softsill::metrics {

enum class PairMeasure {
  coincidence,     ///< Gamma; rows are the reference
  victor_purpura,  ///< unnormalised
  van_rossum,      ///< D, the metric, not D^2
  schreiber,
  isi_distance,
  spike_distance,
  event_reliability
};

/// Settings of all measures; each reads its own.
struct PairSettings {
  CoincidenceSettings coincidence;              ///< Gamma
  double cost_per_s = 200.0;                    ///< Victor-Purpura
  double tau_ms = 10.0;                         ///< van Rossum
  double sigma_ms = 4.0;                        ///< Schreiber
  double event_tau_ms = 4.0;                    ///< event reliability
  EdgeRule edges = EdgeRule::auxiliary_spikes;  ///< ISI- and SPIKE-distance
};

/// Row-major. A pair for which the measure is undefined holds NaN and is left out of every mean.
struct PairMatrix {
  std::size_t rows = 0, columns = 0;
  std::vector<double> values;

  double operator()(std::size_t row, std::size_t column) const {
    return values[row * columns + column];
  }
  double& operator()(std::size_t row, std::size_t column) { return values[row * columns + column]; }
};

/// values(i, j) = measure(rows[i], columns[j]). Both sets must have the same window.
PairMatrix pair_matrix(PairMeasure measure, const TrialSet& rows, const TrialSet& columns,
                       const PairSettings& settings = {});

/// The matrix of a set with itself, pairs of a train with itself included on the diagonal (means
/// leave them out). Gamma is averaged over both orders, so the matrix is symmetric.
PairMatrix pair_matrix(PairMeasure measure, const TrialSet& set, const PairSettings& settings = {});

/// "Gamma", "Victor-Purpura distance", ...
std::string name_of(PairMeasure measure);
/// One line with the settings and conventions that shape the measure.
std::string describe(PairMeasure measure, const PairSettings& settings);
/// True when larger means more alike.
bool is_similarity(PairMeasure measure);

}  // namespace softsill::metrics

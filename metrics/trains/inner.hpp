#pragma once

// The measures without checks, for loops over many pairs. NaN stands for undefined here; the
// public functions turn it into an absent value.

#include <vector>

#include "softsill/metrics/coincidence.hpp"
#include "softsill/metrics/distances.hpp"
#include "softsill/metrics/train.hpp"

namespace softsill::metrics::inner {

double coincidences(Train reference, Train predicted, double window_ms, CountingRule rule);

/// \param row  scratch, kept between calls to spare allocations
double victor_purpura(Train a, Train b, double cost_per_ms, std::vector<double>& row);

/// Sum over i, j of exp(-|t_i - t_j| / tau) of a train with itself.
double exponential_self(Train train, double tau_ms);
/// The same between two trains.
double exponential_cross(Train a, Train b, double tau_ms);

/// Sum over i, j of exp(-(a_i - b_j)^2 / (4 sigma^2)).
double gaussian_cross(Train a, Train b, double sigma_ms);

double isi_distance(Train a, Train b, const Window& window, EdgeRule edges);

/// Scratch of the SPIKE-distance: distances to the nearest spike of the other train.
struct SpikeScratch {
  std::vector<double> a_times, b_times, a_nearest, b_nearest;
};
double spike_distance(Train a, Train b, const Window& window, EdgeRule edges,
                      SpikeScratch& scratch);

double event_reliability(Train a, Train b, double tau_ms);

}  // namespace softsill::metrics::inner

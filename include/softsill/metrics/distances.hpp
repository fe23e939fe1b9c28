#pragma once

/// \file distances.hpp
/// Distances and similarities of two spike trains. All are symmetric. Times in ms.

#include <optional>

#include "softsill/metrics/train.hpp"

namespace softsill::metrics {

/// Spike-time distance of Victor & Purpura (1996, J. Neurophysiol. 76:1310): the least cost of
/// turning one train into the other by deleting or inserting a spike (1 each) and moving one by dt
/// (cost_per_s * dt). A metric. Spikes further apart than 2 / cost never pair, so the table is
/// filled only within that band.
/// \param cost_per_s  q, 1/s, at least 0 and not NaN; infinity is allowed
double victor_purpura(Train a, Train b, double cost_per_s);
/// The same divided by the number of spikes of both trains: 0 to 1, no metric. 0 for two empty
/// trains.
double victor_purpura_normalised(Train a, Train b, double cost_per_s);

/// D^2 of van Rossum (2001, Neural Comput. 13:751): trains filtered by a causal exponential of
/// height 1, D^2 = (1 / tau) times the integral of the squared difference over all time. One spike
/// more is 1/2. Linear time by running sums (Houghton & Kreuz 2012, Network 23:48, who scale D^2 by
/// 2). sqrt(D^2) is the metric.
/// \param tau_ms  positive and finite
double van_rossum_squared(Train a, Train b, double tau_ms);
/// D^2 over (n + m) / 2, its value for unrelated sparse trains; 0 for two empty trains.
double van_rossum_normalised(Train a, Train b, double tau_ms);

/// Correlation of Schreiber et al. (2003, Neurocomputing 52:925): cosine of the trains filtered by
/// a Gaussian. Not corrected for chance. Pairs further apart than 12.6 sigma (exp(-40)) are left
/// out. Empty result when a train has no spikes.
/// \param sigma_ms  positive and finite
std::optional<double> schreiber(Train a, Train b, double sigma_ms);

/// What is taken for the intervals before the first and after the last spike.
enum class EdgeRule {
  /// Auxiliary spikes at both ends of the window in both trains, which also count as neighbours.
  auxiliary_spikes,
  /// The outer interval is the distance to the end of the window, or the neighbouring interval if
  /// that is longer; for the SPIKE-distance the spike beyond it inherits the difference of the
  /// nearest real one. Undefined for empty trains.
  longer_of_neighbours,
  /// No rule: averaged only where both trains have a spike before and after. Undefined when there
  /// is no such stretch.
  common_span
};

/// ISI-distance (Kreuz et al. 2007, J. Neurosci. Methods 165:151): time average of
/// |x - y| / max(x, y), x and y the intervals around t.
std::optional<double> isi_distance(Train a, Train b, const Window& window,
                                   EdgeRule edges = EdgeRule::auxiliary_spikes);

/// SPIKE-distance (Kreuz et al. 2013, J. Neurophysiol. 109:1457, without the rate-independent
/// variants): time average of (S_1 x_2 + S_2 x_1) / (2 m^2), m = (x_1 + x_2) / 2, where
/// S_n = (d_P (t_F - t) + d_F (t - t_P)) / x_n and d is the distance of a spike to the nearest
/// spike of the other train. The profile is linear between spikes, so the average is exact.
std::optional<double> spike_distance(Train a, Train b, const Window& window,
                                     EdgeRule edges = EdgeRule::auxiliary_spikes);

/// Event reliability (Hunter & Milton 2003, J. Neurophysiol. 90:387): mean over spikes of
/// exp(-|dt| / tau), dt to the nearest spike of the other train, averaged over both directions.
/// 0 when one train is empty; empty result when both are.
std::optional<double> event_reliability(Train a, Train b, double tau_ms);

}  // namespace softsill::metrics

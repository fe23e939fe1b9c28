#pragma once

// Simulated cells whose every number is known, built in memory. The simulator here is a plain loop
// of its own: it shares no code with softsill/simulation.hpp, so that a mistake there cannot hide
// one in the fit.

#include <cstdint>
#include <string>
#include <vector>

#include "softsill/estimate.hpp"
#include "softsill/recording.hpp"
#include "softsill/variant.hpp"

namespace softsill::test {

/// amplitude exp(-lag / tau_ms)
struct Decay {
  double amplitude = 0.0;
  double tau_ms = 1.0;
};
double value_at(const std::vector<Decay>& decays, double lag_ms);

/// A leaky membrane with after-spike potentials and, unless empty, a moving threshold.
struct Cell {
  double resistance_MOhm = 120.0;
  double tau_m_ms = 15.0;
  std::vector<Decay> eta = {{-8.0, 12.0}, {-1.5, 60.0}};     ///< mV
  std::vector<Decay> theta_1 = {{6.0, 10.0}, {1.5, 100.0}};  ///< mV
  double resting_potential_mV = -68.0;
  double threshold_mV = -48.0;
  double noise_level_mV = 1.5;
  double refractory_ms = 2.0;
  double exponent = 0.0;  ///< 0: exponential escape function; else log(1 + exp x)^exponent

  double kappa(double lag_ms) const;  ///< mV/(nA ms)
};

/// How a cell is driven and recorded.
struct Protocol {
  double seconds = 50.0;
  double step_ms = 0.1;
  double mean_nA = 0.08, sd_nA = 0.12, correlation_ms = 3.0;  ///< Ornstein-Uhlenbeck current
  bool with_voltage = true;
  double voltage_noise_mV = 0.4, voltage_noise_ms = 2.0;  ///< Ornstein-Uhlenbeck, added to u
  double series_resistance_MOhm = 0.0;                    ///< adds R_s I to the potential
};

/// Sampled Ornstein-Uhlenbeck process, stationary from its first sample.
std::vector<double> ornstein_uhlenbeck(std::size_t samples, double step_ms, double mean, double sd,
                                       double correlation_ms, std::uint64_t seed,
                                       std::uint64_t stream);

/// One sweep of the cell. Before it the current was 0 and there were no spikes. The hazard's
/// integral is summed by midpoints of a fifth of a sample and meets standard exponential variates
/// (time rescaling: Brown et al. 2002, Neural Comput. 14:325). The potential carries a triangular
/// spike of 90 mV from 0.4 ms before to 1.5 ms after each spike time, so a fit that looked there
/// would be far off.
Sweep record(const Cell& cell, const Protocol& protocol, std::uint64_t seed,
             std::uint64_t replicate = 0);

/// A recording of that one sweep.
Recording recording_of(const Cell& cell, const Protocol& protocol, std::uint64_t seed,
                       std::uint64_t replicate = 0);

/// Sets the threshold so that the cell fires at about this rate under the protocol's current.
void set_rate(Cell& cell, const Protocol& protocol, double rate_Hz);

/// What a fit in this mode should find.
struct Truth {
  double noise_level = 0.0;        ///< mV; 0 for spikes alone
  double threshold = 0.0;          ///< theta_0, or (theta_0 - E_0) / Delta
  double resting_potential = 0.0;  ///< joint only
  double resistance = 0.0;         ///< MOhm, or MOhm nA / Delta
  /// True value of a curve of the estimate; 0 for a kernel that the cell does not have.
  double kernel(const Cell& cell, const std::string& name, double lag_ms) const;
  double unit = 1.0;  ///< mV per unit of the estimate
};
Truth truth_of(const Cell& cell, FitMode mode);

/// A row of Estimate::parameters; nullptr when it is not there.
const Quantity* find_row(const Estimate& estimate, const std::string& name,
                         const std::string& method = {});
const KernelCurve* find_curve(const Estimate& estimate, const std::string& name);

/// (estimate - truth) / claimed standard error, from a symmetric 95 % interval (log scale where the
/// row's interval is symmetric there). NaN without an interval.
double z_score(const Quantity& quantity, double truth, bool log_scale = false);

/// Spline kernels of the default escape function over supports of at least seven time constants of
/// Cell(): every kernel has died out (1 part in 1000) where the basis makes it reach 0.
Variant spline_variant();
/// The model class of Cell() itself: tau_m free, the after-spike time constants given.
Variant exponential_variant(const Cell& cell);

/// Share of lags at which the true curve lies inside the band. Lags beyond two thirds of the last
/// one are left out: there the basis makes every kernel and its slope reach 0, whatever the data
/// say, and the band with them.
double share_inside(const Cell& cell, const Estimate& estimate, const KernelCurve& curve);

}  // namespace softsill::test

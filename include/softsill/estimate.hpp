#pragma once

/// \file estimate.hpp
/// What a fit found: numbers with intervals, how far they can be trusted, and where they came from.
/// A number that could not be estimated is absent and explained, never 0 or NaN in disguise.

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "softsill/model.hpp"
#include "softsill/recording.hpp"
#include "softsill/variant.hpp"

namespace softsill {

/// How a fit ended. Only `converged` and `at_boundary` are to be trusted.
enum class FitStatus {
  converged,            ///< Newton decrement under 1e-6 nats, information positive definite
  at_boundary,          ///< the same after a parameter was held at the edge of its range
  converged_imprecise,  ///< decrement between 1e-6 and 1e-3 nats
  not_converged,        ///< the gate failed; numbers are for diagnosis only
  interrupted,          ///< Ctrl-C
  failed                ///< no finite start, or the likelihood left the finite numbers
};

/// What was recorded, and so what can be told.
enum class FitMode {
  spikes_and_voltage,  ///< everything in mV
  spikes_anchored,     ///< spikes alone, scaled to mV by a number the user gave
  spikes_alone         ///< everything in units of Delta; Delta in mV is not estimable
};

std::string_view to_string(FitStatus status);
std::string_view to_string(FitMode mode);
bool trustworthy(FitStatus status);

/// A number with its 95 % interval, or the reason why there is none.
struct Quantity {
  std::optional<double> value;
  std::optional<double> low, high;
  std::string unit;
  std::string method;      ///< "profile likelihood", "observed information", "given", ...
  std::string why_absent;  ///< set exactly when value is empty
};

/// A named row of parameters.csv.
struct NamedQuantity {
  std::string name;
  Quantity quantity;
};

/// A kernel on a grid of lags with pointwise 95 % bands.
struct KernelCurve {
  std::string kernel;  ///< "kappa", "eta", "theta_1", "eta_minus_theta_1", "kappa_by_spikes", ...
  std::string unit;
  std::vector<double> lag_ms, value, low, high;
  std::string why_absent;  ///< set when there is no such kernel to show
  double effective_degrees_of_freedom = 0.0;
  std::optional<double> smoothing;  ///< smoothing parameter, splines only
  /// Stretches of lag where the curve is set by the smoothing, not by the data.
  std::vector<Interval> undetermined;
};

/// Measured error of the quadrature of the hazard, at the estimate.
struct NodeError {
  std::size_t nodes = 0;
  double expected_spikes_error = 0.0;  ///< |integral - refined integral|, spikes
  double allowed = 0.0;                ///< 0.02 sqrt(spikes)
  double largest_shift_in_se = 0.0;    ///< shift of any parameter by refining, in standard errors
};

/// Does kappa seen through the voltage agree in shape with kappa seen through the spikes?
struct KappaConsistency {
  bool tested = false;
  double statistic = 0.0;
  double degrees_of_freedom = 0.0;
  double p_value = 1.0;
  std::string sentence;
};

/// Provenance: enough to repeat the fit.
struct Provenance {
  std::string program_version;
  std::string command_line;
  std::uint64_t seed = 0;
  std::vector<InputFile> inputs;
};

struct Estimate {
  static constexpr int schema_version = 1;

  std::string cell;
  Variant variant;
  FitStatus status = FitStatus::failed;
  FitMode mode = FitMode::spikes_alone;
  std::string status_sentence;    ///< one plain sentence: what the status means here
  std::string minimizer_report;   ///< what Ceres said, for the record
  double newton_decrement = 0.0;  ///< nats
  int starts = 1, starts_agreeing = 1;

  std::size_t spikes = 0;    ///< inside the likelihood
  double analysed_ms = 0.0;  ///< time inside the likelihood
  double left_out_ms = 0.0;  ///< lead-ins left out because their past is unknown
  std::size_t left_out_spikes = 0;
  double log_likelihood = 0.0;                ///< nats, spikes and (where used) voltage, no penalty
  double spike_log_likelihood = 0.0;          ///< nats, spikes alone, rates in 1/ms
  double constant_rate_log_likelihood = 0.0;  ///< nats, the best constant rate on the same time
  double log_marginal_likelihood = 0.0;       ///< Laplace evidence, nats

  Quantity noise_level, threshold, resting_potential;
  std::vector<NamedQuantity> parameters;  ///< everything, for parameters.csv
  std::vector<KernelCurve> kernels;       ///< for kernels.csv
  double effective_degrees_of_freedom = 0.0;
  NodeError node_error;
  KappaConsistency kappa_consistency;
  std::vector<std::string> limits;  ///< plain sentences: what the data cannot tell
  std::vector<std::string> notes;   ///< plain sentences: choices made, costs paid

  /// The point estimate as a model that can be simulated and scored.
  Model model;
  /// The fitted coordinates (names, values, row-major covariance): what the intervals come from.
  std::vector<std::string> coordinate_names;
  std::vector<double> coordinates;
  std::vector<double> covariance;           ///< penalised observed information, inverted
  std::vector<double> sandwich_covariance;  ///< robust, over time blocks

  Provenance provenance;
};

/// estimate.json as documented in README ("Files a fit writes").
std::string to_json(const Estimate& estimate);
/// Reads estimate.json. \throws Error on a wrong schema version or a missing field.
Estimate read_estimate(const std::string& path);
/// kernels.csv: kernel,lag_ms,value,low,high,unit
std::string kernels_csv(const Estimate& estimate);
/// parameters.csv: name,value,low,high,unit,method
std::string parameters_csv(const Estimate& estimate);

}  // namespace softsill

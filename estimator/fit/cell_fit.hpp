#pragma once

/// \file cell_fit.hpp
/// A finished maximisation with everything that later steps read from it.

#include <memory>
#include <string>
#include <vector>

#include "estimator/fit/ceres_minimizer.hpp"
#include "estimator/fit/objective.hpp"
#include "estimator/fit/uncertainty.hpp"
#include "softsill/estimate.hpp"
#include "softsill/fit.hpp"

namespace softsill {

struct CellFit {
  const Recording* recording = nullptr;
  const Variant* variant = nullptr;
  const FitOptions* options = nullptr;
  Exposure exposure;
  std::unique_ptr<CellObjective> likelihood;
  std::unique_ptr<Penalised> penalised;
  Minimum minimum;
  std::vector<Penalty> pilot_penalties;  ///< as the spikes-alone pilot left them
  std::vector<bool> fixed;               ///< coordinates held at an edge
  double log_marginal = 0.0;
  bool smoothing_settled = true;
  int starts = 1, starts_agreeing = 1;
  NodeError node_error;
  Matrix covariance;  ///< Bayesian, smoothing as chosen
  Matrix sandwich;
  int time_blocks = 0;

  const Coordinates& coordinates() const { return likelihood->coordinates(); }
  bool joint() const { return coordinates().joint(); }
  /// Options of a maximisation with this fit's edges held.
  MinimizerOptions minimizer_options() const;
};

/// A derived number as value and gradient by theta, in what a person reads (mV, or units of Delta).
struct Derived {
  double value = 0.0;
  Vector gradient;                 ///< by theta
  double anchor_derivative = 0.0;  ///< by the anchor's own number, anchored fits only
};

/// The one place where coefficients become what is reported: scales spikes-alone numbers to mV when
/// the user gave an anchor.
class Reading {
 public:
  explicit Reading(const CellFit& fit);
  FitMode mode() const { return mode_; }
  /// "mV", or "Delta".
  std::string potential_unit() const;
  /// potential_unit per input unit and ms.
  std::string kappa_unit() const;
  /// MOhm where that is what it is, else potential_unit per input unit.
  std::string resistance_unit() const;

  Derived curve(const KernelPart& part, double lag_ms) const;
  Derived integral(const KernelPart& part) const;
  Derived noise_level() const;        ///< not for spikes alone
  Derived threshold() const;          ///< joint: theta_0; else theta_0 - E_0
  Derived resting_potential() const;  ///< joint only
  /// Standard error by the delta method from a covariance of theta.
  double standard_error(const Derived& derived, const Matrix& covariance) const;
  /// What multiplies units of Delta.
  double scale() const { return scale_.value; }

 private:
  Derived combine(const KernelPart& part, const std::vector<double>& weights,
                  const std::vector<double>& tau_derivatives) const;
  Derived scaled(Derived in_delta) const;

  const CellFit& fit_;
  FitMode mode_;
  Derived scale_;  ///< Delta in mV from the anchor, or 1
  double anchor_error_ = 0.0;
};

/// Plausible coefficients from a spikes-alone pilot and (joint) the potential alone; time constants
/// and the escape function's own parameters are taken from `nonlinear`.
Vector starting_values(const Coordinates& target, const Coordinates& pilot,
                       const Minimum& pilot_minimum, const VoltageFit* voltage,
                       const Vector& pilot_predictor_at_spikes, const Vector& nonlinear);

/// The fit's kernels as curves with bands, and effective degrees of freedom.
void describe_curves(const CellFit& fit, const Reading& reading, double z, Estimate& estimate);
/// A kernel there is nothing to show of.
KernelCurve absent_curve(const std::string& name, const std::string& why);
/// Sets status, quantities, curves, model and bookkeeping of an estimate.
void describe(CellFit& fit, Estimate& estimate);
/// Adds the plain sentences about what the data cannot tell.
void describe_limits(CellFit& fit, Estimate& estimate);
/// Joint fits: kappa by voltage against kappa by spikes; adds the curves and the test.
void check_kappa(CellFit& fit, Estimate& estimate);

}  // namespace softsill

#pragma once

/// \file fit_steps.hpp
/// The steps of a fit, in the order in which they are taken.

#include <functional>
#include <memory>
#include <vector>

#include "estimator/fit/cell_fit.hpp"

namespace softsill {

/// Throws out of nested numerical work when the user stops the fit.
struct Interrupted {};

/// Progress in the user's terms.
class Progress {
 public:
  explicit Progress(const FitOptions& options) : options_(options) {}
  /// A new stage. \throws Interrupted
  void at(double share, const std::string& words);
  /// The same stage goes on. \throws Interrupted
  void tick();
  /// For callbacks that must not throw.
  bool keep_going();

 private:
  const FitOptions& options_;
  double share_ = 0.0;
  std::string words_;
  bool stopped_ = false;
};

/// A spikes-alone fit with the exponential escape and penalised splines on coarse nodes: concave,
/// quick, and good enough to say where the hazard is and where to start.
struct Pilot {
  std::unique_ptr<CellObjective> objective;
  Minimum minimum;
  std::vector<Penalty> penalties;
  Vector at_nodes, at_spikes;  ///< log hazard
};
Pilot run_pilot(const Variant& variant, const Exposure& exposure, int threads, Progress& progress);

/// One roughness penalty per spline kernel, with smoothing parameters near the data's own scale.
std::vector<Penalty> penalties_for(const Coordinates& coordinates, const Matrix& information);
/// Smoothing parameters of a pilot, a better start than a guess, for kernels of the same size. The
/// pilot's kernels are in units of Delta = 1 / b; b is 1 where `penalties` are in the same units.
void take_pilot_smoothing(const std::vector<Penalty>& pilot, double b,
                          std::vector<Penalty>& penalties);
/// The pilot's smoothing parameters, or the given ones, and a weak ridge on what would separate.
void prepare_penalties(const CellFit& fit, const Pilot& pilot, const Vector& start,
                       std::vector<Penalty>& penalties);
/// Unpenalised after-spike columns that no spike ever falls into would run to minus infinity. Each
/// gets a weak ridge; returns how many.
int bound_separated_columns(const CellObjective& objective, std::vector<Penalty>& penalties);

/// A start from the pilot (and the potential) for given time constants and own parameters, which
/// are taken from `nonlinear`: linear coefficients always fit what is not.
Vector fresh_start(CellFit& fit, const Pilot& pilot, const Vector& nonlinear);
/// Fits only what the potential does not carry (b, theta_0, theta_1), where the likelihood is
/// concave; a good start for everything at once. Spikes alone: the start itself.
Vector threshold_first(CellFit& fit, const Vector& start);
/// Whether the likelihood may have several maxima.
bool needs_starts(const Coordinates& coordinates, const Variant& variant);
/// Maximises from several starts at the present smoothing; keeps the best and counts who agrees.
void try_starts(CellFit& fit, const Pilot& pilot, const Vector& first, Progress& progress);
/// A joint fit is not concave as a whole: once more from a start with another softness.
void try_other_softness(CellFit& fit);
/// Coordinates that ran to an edge are held there and the rest fitted again.
void hold_edges(CellFit& fit);

/// Expected spikes that the nodes may be off by: 0.02 sqrt(spikes).
double allowed_node_error(const Exposure& exposure);
/// Refines the nodes until their measured error is small, fitting again each time.
void settle_nodes(CellFit& fit, Progress& progress);

}  // namespace softsill

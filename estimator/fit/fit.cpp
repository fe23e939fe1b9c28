#include "softsill/fit.hpp"

#include <algorithm>
#include <cmath>

#include "estimator/fit/fit_steps.hpp"
#include "estimator/fit/parallel.hpp"
#include "estimator/fit/smoothing.hpp"
#include "softsill/error.hpp"
#include "softsill/quality.hpp"

namespace softsill {
namespace {

constexpr double first_node_share = 0.5;  // of the allowed error of the nodes

double block_length_ms(const Coordinates& coordinates) {
  return std::max(1000.0, coordinates.support_ms());
}

FitStatus status_of(CellFit& fit) {
  const Minimum& minimum = fit.minimum;
  if (minimum.interrupted) {
    return FitStatus::interrupted;
  }
  if (!minimum.finite) {
    return FitStatus::failed;
  }
  const bool edge = std::any_of(fit.fixed.begin(), fit.fixed.end(), [](bool held) { return held; });
  if (minimum.passed() && !values_agree(*fit.penalised, minimum, fit.fixed)) {
    return FitStatus::not_converged;
  }
  if (minimum.passed()) {
    return edge ? FitStatus::at_boundary : FitStatus::converged;
  }
  return minimum.passed(1e-3) ? FitStatus::converged_imprecise : FitStatus::not_converged;
}

void fill_bookkeeping(CellFit& fit, Estimate& estimate) {
  const Exposure& exposure = fit.exposure;
  estimate.status = status_of(fit);
  estimate.newton_decrement = fit.minimum.decrement;
  estimate.minimizer_report = fit.minimum.report;
  estimate.starts = fit.starts;
  estimate.starts_agreeing = fit.starts_agreeing;
  estimate.spikes = exposure.spikes;
  estimate.analysed_ms = exposure.analysed_ms;
  estimate.left_out_ms = exposure.left_out_ms;
  estimate.left_out_spikes = exposure.left_out_spikes;
  estimate.node_error = fit.node_error;
  estimate.log_marginal_likelihood = fit.log_marginal;
  const double n = static_cast<double>(exposure.spikes);
  estimate.constant_rate_log_likelihood = n * std::log(n / exposure.at_risk_ms) - n;
}

/// The likelihood of a cell on nodes placed by the pilot.
void build_likelihood(CellFit& fit, const Pilot& pilot, double lead_in_ms, Progress& progress) {
  const Variant& variant = *fit.variant;
  const int threads = thread_count(fit.options->threads);
  const bool joint = variant.use_voltage && fit.recording->has_voltage();
  Coordinates coordinates(variant, joint, joint && fit.recording->series_resistance.fit);
  const double block_ms = block_length_ms(coordinates);
  // Outlives this function inside the objective, hence copies.
  auto gather = [&fit, &variant, lead_in_ms, block_ms, threads](const Columns& columns) {
    return gather_voltage(columns, fit.exposure, *fit.recording, variant, lead_in_ms, block_ms,
                          threads);
  };
  VoltageStatistics statistics;
  if (joint) {
    progress.at(0.2, "reading the potential");
    statistics = gather(coordinates.voltage_columns());
  }
  progress.at(0.3, "placing nodes");
  NodePlan plan{&fit.exposure,
                place_nodes(refined_cells(pilot.objective->plan().nodes, pilot.at_nodes,
                                          first_node_share * allowed_node_error(fit.exposure))),
                block_ms};
  fit.fixed.assign(coordinates.size(), false);
  fit.likelihood = std::make_unique<CellObjective>(std::move(coordinates), std::move(plan),
                                                   std::move(statistics), threads);
  if (joint && fit.coordinates().free_time_constants() > 0) {
    fit.likelihood->set_voltage_gatherer(gather);
  }
}

/// Start, starts, smoothing, edges, nodes.
void maximise(CellFit& fit, const Pilot& pilot, Progress& progress) {
  progress.at(0.4, "maximising the likelihood");
  Vector start = fresh_start(fit, pilot, fit.coordinates().neutral_start());
  const Matrix information =
      fit.likelihood->evaluate(start, Want::derivatives_and_expected).expected;
  std::vector<Penalty> penalties = penalties_for(fit.coordinates(), information);
  prepare_penalties(fit, pilot, start, penalties);
  fit.penalised = std::make_unique<Penalised>(*fit.likelihood, std::move(penalties));
  const bool many = needs_starts(fit.coordinates(), *fit.variant);
  if (many) {
    start = threshold_first(fit, start);
    try_starts(fit, pilot, start, progress);
    start = fit.minimum.theta;
  }
  progress.at(0.5, "choosing the smoothing");
  SmoothingOptions smoothing;
  smoothing.minimizer = fit.minimizer_options();
  smoothing.progress = [&](int round) {
    progress.at(0.5 + 0.3 * (1.0 - std::exp(-round / 5.0)), "choosing the smoothing");
    return true;
  };
  const Smoothed smoothed = choose_smoothing(*fit.penalised, start, smoothing);
  fit.minimum = smoothed.minimum;
  fit.smoothing_settled = smoothed.settled;
  if (!fit.minimum.finite) {
    return;
  }
  hold_edges(fit);
  progress.at(0.85, "checking the nodes");
  settle_nodes(fit, progress);
  if (!many && fit.joint()) {
    try_other_softness(fit);
  }
  if (fit.minimum.positive_definite) {
    fit.log_marginal = log_marginal_likelihood(*fit.penalised, fit.minimum);
  }
}

void check_variant(const Variant& variant, const Recording& recording) {
  if (variant.kappa.family == KernelFamily::exponentials && variant.kappa.with_membrane) {
    throw Error("", "variant " + variant.name, "with_membrane belongs to eta, not to kappa");
  }
  for (const Sweep& sweep : recording.sweeps) {
    if (sweep.use == Use::estimate && sweep.analysed.empty()) {
      throw Error("", "sweep " + sweep.name, "has no time to analyse",
                  "check start_ms, end_ms and exclude in the cell sheet");
    }
  }
}

}  // namespace

void Progress::at(double share, const std::string& words) {
  share_ = share;
  words_ = words;
  tick();
}

void Progress::tick() {
  if (!keep_going()) {
    throw Interrupted{};
  }
}

bool Progress::keep_going() {
  if (options_.progress && !options_.progress(share_, words_)) {
    stopped_ = true;
  }
  return !stopped_;
}

MinimizerOptions CellFit::minimizer_options() const {
  MinimizerOptions out;
  out.max_iterations = options->max_iterations;
  out.fixed = fixed;
  if (options->progress) {
    out.keep_going = [this] { return options->progress(0.6, "maximising the likelihood"); };
  }
  return out;
}

Estimate fit(const Recording& recording, const Variant& variant, const FitOptions& options) {
  check_variant(variant, recording);
  require_fittable(recording, variant.use_voltage);
  Estimate estimate;
  estimate.cell = recording.cell;
  estimate.variant = variant;
  estimate.provenance.seed = options.seed;
  estimate.provenance.inputs = recording.files;
  Progress progress(options);
  CellFit work;
  work.recording = &recording;
  work.variant = &variant;
  work.options = &options;
  const int threads = thread_count(options.threads);
  const bool joint = variant.use_voltage && recording.has_voltage();
  const double lead_in = std::max(Coordinates(variant, joint, false).support_ms(),
                                  Coordinates(variant, false, false).support_ms());
  work.exposure = make_exposure(recording, variant.refractory, lead_in, options);
  try {
    progress.at(0.0, "first look");
    const Pilot pilot = run_pilot(variant, work.exposure, threads, progress);
    if (!pilot.minimum.finite) {
      estimate.status = FitStatus::failed;
      estimate.status_sentence = "No finite starting point was found; nothing is estimated.";
      return estimate;
    }
    work.pilot_penalties = pilot.penalties;
    build_likelihood(work, pilot, options.before ? 0.0 : lead_in, progress);
    maximise(work, pilot, progress);
    fill_bookkeeping(work, estimate);
    if (estimate.status != FitStatus::failed && estimate.status != FitStatus::interrupted) {
      progress.at(0.9, "intervals");
      describe(work, estimate);
      describe_limits(work, estimate);
      if (joint && trustworthy(estimate.status)) {
        check_kappa(work, estimate);
      }
    } else {
      estimate.status_sentence =
          estimate.status == FitStatus::interrupted
              ? "The fit was stopped; nothing is estimated."
              : "The likelihood left the finite numbers; nothing is estimated.";
    }
  } catch (const Interrupted&) {
    estimate.status = FitStatus::interrupted;
    estimate.status_sentence = "The fit was stopped; nothing is estimated.";
  }
  progress.keep_going();
  return estimate;
}

}  // namespace softsill

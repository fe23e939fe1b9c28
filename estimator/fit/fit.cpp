#include "softsill/fit.hpp"

#include <algorithm>
#include <cmath>
#include <numeric>

#include "estimator/fit/cell_fit.hpp"
#include "estimator/fit/parallel.hpp"
#include "estimator/fit/smoothing.hpp"
#include "softsill/error.hpp"
#include "softsill/quality.hpp"
#include "softsill/random.hpp"

namespace softsill {
namespace {

constexpr double pilot_cell_ms = 2.0;
constexpr double change_per_cell = 1.0;          // of log hazard within one two-point cell
constexpr double allowed_integral_error = 0.02;  // times sqrt(spikes)
constexpr double allowed_shift = 0.05;           // standard errors
constexpr int most_refinements = 4;
constexpr double same_optimum = 1e-3;     // nats
constexpr double separated_ridge = 0.04;  // prior sd of 5 units of Delta

/// Throws out of nested numerical work when the user stops the fit.
struct Interrupted {};

/// Progress in the user's terms; throws Interrupted.
class Progress {
 public:
  explicit Progress(const FitOptions& options) : options_(options) {}
  void at(double share, const std::string& words) {
    share_ = share;
    words_ = words;
    tick();
  }
  void tick() {
    if (options_.progress && !options_.progress(share_, words_)) {
      stopped_ = true;
    }
    if (stopped_) {
      throw Interrupted{};
    }
  }
  /// For callbacks that must not throw.
  bool keep_going() {
    if (options_.progress && !options_.progress(share_, words_)) {
      stopped_ = true;
    }
    return !stopped_;
  }

 private:
  const FitOptions& options_;
  double share_ = 0.0;
  std::string words_;
  bool stopped_ = false;
};

double block_length_ms(const Coordinates& coordinates) {
  return std::max(1000.0, coordinates.support_ms());
}

/// Smoothing parameters that start near the data's own scale.
std::vector<Penalty> penalties_for(const Coordinates& coordinates, const Matrix& information) {
  std::vector<Penalty> penalties;
  for (const KernelPart& part : coordinates.parts()) {
    if (!part.penalised()) {
      continue;
    }
    Penalty penalty = roughness_penalty(part.name, part.first, part.size());
    const auto first = static_cast<Eigen::Index>(part.first);
    const auto n = static_cast<Eigen::Index>(part.size());
    penalty.lambda = std::max(
        1e-8, 1e-2 * information.block(first, first, n, n).trace() / penalty.matrix.trace());
    penalties.push_back(std::move(penalty));
  }
  return penalties;
}

/// The pilot's smoothing is a better start than a guess. Its kappa is kappa / Delta.
void take_pilot_smoothing(const std::vector<Penalty>& pilot, const Coordinates& coordinates,
                          const Vector& start, std::vector<Penalty>& penalties) {
  const double b = coordinates.joint() ? start[coordinates.index("b")] : 1.0;
  for (Penalty& penalty : penalties) {
    for (const Penalty& from : pilot) {
      const bool history = from.name == "eta_minus_theta_1" && penalty.name != "kappa";
      if (from.matrix.rows() == penalty.matrix.rows() && from.chosen &&
          (from.name == penalty.name || history)) {
        // Coefficients in mV are b times smaller in units of Delta.
        penalty.lambda = from.lambda * (penalty.name == "theta_1" ? 1.0 : b * b);
      }
    }
  }
}

void set_given_smoothing(const SmoothingPlan& plan, std::vector<Penalty>& penalties) {
  for (Penalty& penalty : penalties) {
    penalty.chosen = plan.automatic;
    if (!plan.automatic) {
      penalty.lambda = penalty.name == "kappa"     ? plan.kappa
                       : penalty.name == "theta_1" ? plan.theta_1
                                                   : plan.eta;
    }
  }
}

/// Unpenalised after-spike columns that no spike ever falls into would run to minus infinity. Each
/// gets a weak ridge; returns how many.
int bound_separated_columns(const CellObjective& objective, std::vector<Penalty>& penalties) {
  int found = 0;
  const Coordinates& coordinates = objective.coordinates();
  for (const KernelPart& part : coordinates.parts()) {
    if (part.name == "kappa" || part.penalised()) {
      continue;
    }
    const auto first = static_cast<Eigen::Index>(
        coordinates.spike_columns().blocks[static_cast<std::size_t>(part.spike_block)].first);
    for (std::size_t j = 0; j < part.size(); ++j) {
      const auto column = first + static_cast<Eigen::Index>(j);
      if (objective.design().spikes.col(column).cwiseAbs().sum() > 0.0 ||
          objective.design().nodes.col(column).cwiseAbs().sum() == 0.0) {
        continue;
      }
      Penalty ridge;
      ridge.name = part.name + " (no spikes there)";
      ridge.first = part.first + j;
      ridge.matrix = Matrix::Identity(1, 1);
      ridge.lambda = separated_ridge;
      ridge.rank = 1;
      ridge.chosen = false;
      penalties.push_back(std::move(ridge));
      ++found;
    }
  }
  return found;
}

/// A spikes-alone fit with the exponential escape on coarse nodes: concave, quick, and good enough
/// to say where the hazard is and where to start.
struct Pilot {
  std::unique_ptr<CellObjective> objective;
  Minimum minimum;
  std::vector<Penalty> penalties;
  Vector at_nodes, at_spikes;  ///< log hazard
};

Pilot run_pilot(const Variant& variant, const Exposure& exposure, int threads, Progress& progress) {
  Variant simple = variant;
  simple.escape = Escape{};
  simple.fit_lambda_0 = simple.fit_exponent = false;
  for (KernelPlan* plan : {&simple.kappa, &simple.eta, &simple.theta_1}) {
    plan->fit_time_constants = false;
  }
  Pilot pilot;
  NodePlan plan{&exposure, place_nodes(graded_cells(exposure, pilot_cell_ms, CellRule::midpoint)),
                1000.0};
  pilot.objective = std::make_unique<CellObjective>(Coordinates(simple, false, false),
                                                    std::move(plan), VoltageStatistics{}, threads);
  Vector start = pilot.objective->coordinates().neutral_start();
  start[0] = std::log(static_cast<double>(exposure.spikes) / exposure.at_risk_ms);
  const Matrix information = pilot.objective->evaluate(start, Want::derivatives).hessian;
  std::vector<Penalty> penalties = penalties_for(pilot.objective->coordinates(), information);
  bound_separated_columns(*pilot.objective, penalties);
  Penalised penalised(*pilot.objective, penalties);
  SmoothingOptions options;
  options.rounds = 3;
  options.minimizer.decrement = 1e-3;  // a pilot needs no more
  options.minimizer.keep_going = [&] { return progress.keep_going(); };
  pilot.minimum = choose_smoothing(penalised, start, options).minimum;
  pilot.penalties = penalised.penalties();
  progress.tick();
  const Mapped mapped = pilot.objective->coordinates().map(pilot.minimum.theta);
  pilot.at_nodes = pilot.objective->design().nodes * mapped.beta;
  pilot.at_spikes = pilot.objective->design().spikes * mapped.beta;
  return pilot;
}

/// Moves what makes the likelihood non-concave, with a stream of its own per start.
Vector scattered_start(const Coordinates& coordinates, const Vector& best, std::uint64_t seed,
                       int index) {
  RandomStream random(seed, static_cast<std::uint64_t>(index));
  Vector theta = best;
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    const std::string& name = coordinates.names()[i];
    const auto at = static_cast<Eigen::Index>(i);
    if (coordinates.is_time_constant(i)) {
      theta[at] = coordinates.neutral_start()[at] + 1.0 * random.normal();
    } else if (name == "b") {
      theta[at] *= std::exp(0.5 * random.normal());
    } else if (name == "log_lambda_0" || name == "log_exponent") {
      theta[at] += 0.5 * random.normal();
    }
  }
  return theta;
}

/// Coordinates that ran to an edge are held there and the rest fitted again.
void hold_edges(CellFit& fit) {
  for (int round = 0; round < 3; ++round) {
    bool any = false;
    for (std::size_t i = 0; i < fit.coordinates().size(); ++i) {
      if (!fit.fixed[i] &&
          fit.coordinates().at_edge(i, fit.minimum.theta[static_cast<Eigen::Index>(i)])) {
        fit.fixed[i] = true;
        any = true;
      }
    }
    if (!any) {
      return;
    }
    fit.minimum = minimize(*fit.penalised, fit.minimum.theta, fit.minimizer_options());
  }
}

bool needs_starts(const Coordinates& coordinates, const Variant& variant) {
  return coordinates.free_time_constants() > 0 || !escape_is_concave(variant.escape.kind) ||
         coordinates.index("log_lambda_0") >= 0 || coordinates.index("log_exponent") >= 0;
}

/// Tries further starts at the present smoothing; keeps the best and counts who agrees.
void try_starts(CellFit& fit, Progress& progress) {
  const int starts = needs_starts(fit.coordinates(), *fit.variant) ? fit.options->starts
                     : fit.joint()                                 ? 2
                                                                   : 1;
  std::vector<double> values = {fit.minimum.value};
  const Vector first = fit.minimum.theta;
  for (int i = 1; i < starts; ++i) {
    progress.tick();
    const Vector start = scattered_start(fit.coordinates(), first, fit.options->seed, i);
    MinimizerOptions options = fit.minimizer_options();
    options.decrement = 1e-6;
    const Minimum other = minimize(*fit.penalised, start, options);
    if (!other.finite) {
      continue;
    }
    values.push_back(other.value);
    if (other.value < fit.minimum.value - same_optimum && other.positive_definite) {
      fit.minimum = other;
    }
  }
  fit.starts = starts;
  fit.starts_agreeing =
      static_cast<int>(std::count_if(values.begin(), values.end(), [&](double value) {
        return value < fit.minimum.value + same_optimum;
      }));
}

/// Measured error of the present nodes, and which cells carry it.
struct NodeCheck {
  NodeError error;
  std::vector<double> cell_difference;  ///< expected spikes, finer minus present
};

Vector rates_at(const SpikeDesign& design, const Mapped& m) {
  Vector rate = design.nodes * m.beta;
  for (double& x : rate) {
    x = escape_rate(m.escape, x);
  }
  return rate;
}

/// Compares the nodes with finer ones everywhere, at the present estimate.
NodeCheck check_nodes(CellFit& fit) {
  CellObjective& likelihood = *fit.likelihood;
  const Mapped m = likelihood.coordinates().map(fit.minimum.theta);
  NodePlan plan = likelihood.plan();
  plan.nodes = place_nodes(finer_cells(plan.nodes.cells));
  const SpikeDesign finer =
      make_design(likelihood.coordinates().spike_columns(), plan, likelihood.threads());
  const Vector coarse_rate = rates_at(likelihood.design(), m), fine_rate = rates_at(finer, m);
  const std::vector<double> coarse = cell_integrals(likelihood.plan().nodes, coarse_rate);
  const std::vector<double> fine = cell_integrals(plan.nodes, fine_rate);
  NodeCheck check;
  check.cell_difference = coarse;
  std::size_t part = 0, index = 0;
  double total = 0.0;
  for (const SweepCells& sweep : likelihood.plan().nodes.cells) {
    for (const Cell& cell : sweep) {
      double sum = fine[part++];
      if (cell.rule == CellRule::two_point) {
        sum += fine[part++];
      }
      check.cell_difference[index] = sum - coarse[index];
      total += check.cell_difference[index++];
    }
  }
  check.error.nodes = likelihood.plan().nodes.size();
  check.error.expected_spikes_error = std::abs(total);
  check.error.allowed =
      allowed_integral_error * std::sqrt(static_cast<double>(fit.exposure.spikes));
  // The same spikes are in both, so scores differ by the integrals' derivatives alone.
  auto score = [&](const SpikeDesign& design) {
    return evaluate_spikes(design, m.escape, m.beta, Want::gradient, likelihood.threads()).gradient;
  };
  const Vector shift =
      fit.covariance * (m.beta_jacobian.transpose() * (score(finer) - score(likelihood.design())));
  for (Eigen::Index i = 0; i < shift.size(); ++i) {
    if (fit.covariance(i, i) > 0.0) {
      check.error.largest_shift_in_se = std::max(
          check.error.largest_shift_in_se, std::abs(shift[i]) / std::sqrt(fit.covariance(i, i)));
    }
  }
  return check;
}

/// The cells with the largest errors, so that the rest together stays far below what is allowed.
std::vector<bool> worst_cells(const NodeCheck& check) {
  const std::size_t n = check.cell_difference.size();
  std::vector<std::size_t> order(n);
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::stable_sort(order.begin(), order.end(), [&](std::size_t a, std::size_t b) {
    return std::abs(check.cell_difference[a]) < std::abs(check.cell_difference[b]);
  });
  std::vector<bool> chosen(n, false);
  double kept = 0.0;
  for (std::size_t i = 0; i < n; ++i) {
    kept += std::abs(check.cell_difference[order[i]]);
    // At least the worst eighth goes, for errors of the score that cancel in the integral.
    chosen[order[i]] = kept > 0.2 * check.error.allowed || i >= n - n / 8;
  }
  return chosen;
}

/// Refines the nodes until their measured error is small, fitting again each time.
void settle_nodes(CellFit& fit, Progress& progress) {
  for (int round = 0;; ++round) {
    progress.tick();
    fit.covariance = inverse_information(fit.minimum.hessian, fit.fixed);
    const NodeCheck check = check_nodes(fit);
    fit.node_error = check.error;
    const bool good = fit.node_error.expected_spikes_error <= fit.node_error.allowed &&
                      fit.node_error.largest_shift_in_se <= allowed_shift;
    if (good || round == most_refinements) {
      return;
    }
    fit.likelihood->set_nodes(
        place_nodes(finer_cells(fit.likelihood->plan().nodes.cells, worst_cells(check))));
    fit.minimum = minimize(*fit.penalised, fit.minimum.theta, fit.minimizer_options());
    if (!fit.minimum.finite) {
      return;
    }
  }
}

FitStatus status_of(const CellFit& fit) {
  const Minimum& minimum = fit.minimum;
  if (minimum.interrupted) {
    return FitStatus::interrupted;
  }
  if (!minimum.finite) {
    return FitStatus::failed;
  }
  const bool edge = std::any_of(fit.fixed.begin(), fit.fixed.end(), [](bool held) { return held; });
  if (minimum.passed()) {
    return edge ? FitStatus::at_boundary : FitStatus::converged;
  }
  return minimum.passed(1e-3) ? FitStatus::converged_imprecise : FitStatus::not_converged;
}

void fill_bookkeeping(const CellFit& fit, Estimate& estimate) {
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

/// The whole maximisation: start, smoothing, starts, nodes, edges.
void maximise(CellFit& fit, const Pilot& pilot, double lead_in_ms, Progress& progress) {
  const Variant& variant = *fit.variant;
  const FitOptions& options = *fit.options;
  const int threads = thread_count(options.threads);
  const bool joint = variant.use_voltage && fit.recording->has_voltage();
  Coordinates coordinates(variant, joint, joint && fit.recording->series_resistance.fit);
  const double block_ms = block_length_ms(coordinates);
  VoltageStatistics statistics;
  VoltageFit voltage_fit;
  auto gather = [&](const Columns& columns) {
    return gather_voltage(columns, fit.exposure, *fit.recording, variant, lead_in_ms, block_ms,
                          threads);
  };
  if (joint) {
    progress.at(0.2, "reading the potential");
    statistics = gather(coordinates.voltage_columns());
    const auto width = static_cast<Eigen::Index>(coordinates.voltage_columns().width);
    Matrix penalty = Matrix::Zero(width, width);
    for (const KernelPart& part : coordinates.parts()) {
      if (part.penalised() && part.voltage_block >= 0) {
        const Penalty rough = roughness_penalty(part.name, 0, part.size());
        const auto first =
            static_cast<Eigen::Index>(coordinates.voltage_columns()
                                          .blocks[static_cast<std::size_t>(part.voltage_block)]
                                          .first);
        const auto n = static_cast<Eigen::Index>(part.size());
        penalty.block(first, first, n, n) =
            1e-4 * statistics.total.mean.block(first, first, n, n).trace() / rough.matrix.trace() *
            rough.matrix;
      }
    }
    // Columns of derivatives have no coefficient of their own.
    for (const ColumnBlock& block : coordinates.voltage_columns().blocks) {
      for (std::size_t j = block.functions(); j < block.width(); ++j) {
        const auto at = static_cast<Eigen::Index>(block.first + j);
        penalty(at, at) = 1e12 * (1.0 + statistics.total.mean(at, at));
      }
    }
    voltage_fit = fit_voltage(statistics, penalty);
  }
  progress.at(0.3, "placing nodes");
  NodePlan plan{
      &fit.exposure,
      place_nodes(refined_cells(pilot.objective->plan().nodes, pilot.at_nodes, change_per_cell,
                                static_cast<double>(fit.exposure.spikes))),
      block_ms};
  const Vector start = starting_values(coordinates, pilot.objective->coordinates(), pilot.minimum,
                                       &voltage_fit, pilot.at_spikes);
  fit.fixed.assign(coordinates.size(), false);
  fit.likelihood = std::make_unique<CellObjective>(std::move(coordinates), std::move(plan),
                                                   std::move(statistics), threads);
  if (joint && fit.coordinates().free_time_constants() > 0) {
    fit.likelihood->set_voltage_gatherer(gather);
  }
  progress.at(0.4, "maximising the likelihood");
  const Matrix information =
      fit.likelihood->evaluate(start, Want::derivatives_and_expected).expected;
  std::vector<Penalty> penalties = penalties_for(fit.coordinates(), information);
  take_pilot_smoothing(pilot.penalties, fit.coordinates(), start, penalties);
  set_given_smoothing(variant.smoothing, penalties);
  bound_separated_columns(*fit.likelihood, penalties);
  fit.penalised = std::make_unique<Penalised>(*fit.likelihood, std::move(penalties));
  const bool many = needs_starts(fit.coordinates(), variant);
  if (many) {
    fit.minimum = minimize(*fit.penalised, start, fit.minimizer_options());
    try_starts(fit, progress);
  }
  progress.at(0.5, "choosing the smoothing");
  SmoothingOptions smoothing;
  smoothing.minimizer = fit.minimizer_options();
  smoothing.progress = [&](int round) {
    progress.at(0.5 + 0.3 * (1.0 - std::exp(-round / 5.0)), "choosing the smoothing");
    return true;
  };
  const Smoothed smoothed =
      choose_smoothing(*fit.penalised, many ? fit.minimum.theta : start, smoothing);
  fit.minimum = smoothed.minimum;
  fit.smoothing_settled = smoothed.settled;
  if (fit.minimum.finite) {
    hold_edges(fit);
    progress.at(0.85, "checking the nodes");
    settle_nodes(fit, progress);
    if (!many) {
      try_starts(fit, progress);
    }
    if (fit.minimum.positive_definite) {
      fit.log_marginal = log_marginal_likelihood(*fit.penalised, fit.minimum);
    }
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
  require_fittable(recording);
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
    maximise(work, pilot, options.before ? 0.0 : lead_in, progress);
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

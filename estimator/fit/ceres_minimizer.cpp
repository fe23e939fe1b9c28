#include "estimator/fit/ceres_minimizer.hpp"

#include <ceres/ceres.h>
#include <glog/logging.h>

#include <cmath>
#include <limits>

namespace softsill {
namespace {

constexpr double room_below = 1e5;  // nats between the cost's zero and the value
constexpr int most_solves = 50;
constexpr int most_polishing = 20;

/// Free coordinates in, everything the solver needs out.
class Reduced {
 public:
  Reduced(Objective& objective, Vector start, const std::vector<bool>& fixed)
      : objective_(objective), full_(std::move(start)) {
    for (Eigen::Index i = 0; i < full_.size(); ++i) {
      if (fixed.empty() || !fixed[static_cast<std::size_t>(i)]) {
        free_.push_back(i);
      }
    }
  }
  Eigen::Index size() const { return static_cast<Eigen::Index>(free_.size()); }
  Vector reduce(const Vector& full) const { return full(free_); }
  Vector expand(const Vector& reduced) const {
    Vector full = full_;
    full(free_) = reduced;
    return full;
  }
  /// The last point with derivatives is kept: the solver asks for it again and again.
  Evaluated evaluate(const Vector& reduced, Want want) const {
    if (want != Want::derivatives_and_expected && reduced.size() == last_at_.size() &&
        reduced == last_at_) {
      return last_;
    }
    Evaluated all = objective_.evaluate(expand(reduced), want);
    if (want == Want::derivatives) {
      last_full_ = all;
    }
    if (want != Want::value && std::isfinite(all.value)) {
      all.gradient = Vector(all.gradient(free_));
      all.hessian = Matrix(all.hessian(free_, free_));
      if (want == Want::derivatives_and_expected) {
        all.expected = Matrix(all.expected(free_, free_));
      }
    }
    if (want == Want::derivatives) {
      last_at_ = reduced;
      last_ = all;
    }
    return all;
  }
  /// All coordinates' derivatives at the last point asked for with derivatives.
  const Evaluated& last_full() const { return last_full_; }

 private:
  Objective& objective_;
  Vector full_;
  mutable Vector last_at_;
  mutable Evaluated last_, last_full_;
  std::vector<Eigen::Index> free_;
};

/// Cholesky factor of the Hessian, or of the nearest thing to it that has one.
Matrix positive_factor(const Reduced& problem, const Vector& at, const Evaluated& here) {
  Eigen::LLT<Matrix> factor(here.hessian);
  if (factor.info() == Eigen::Success) {
    return factor.matrixL();
  }
  Matrix stand_in = problem.evaluate(at, Want::derivatives_and_expected).expected;
  const double scale = std::max(stand_in.diagonal().maxCoeff(), 1e-300);
  for (double ridge = 1e-12; ridge < 1e3; ridge *= 10.0) {
    factor.compute(stand_in + ridge * scale * Matrix::Identity(at.size(), at.size()));
    if (factor.info() == Eigen::Success) {
      break;
    }
  }
  return factor.matrixL();
}

/// 1/2 g^T H^-1 g, infinity where H is not positive definite.
double newton_decrement(const Evaluated& here) {
  const Eigen::LLT<Matrix> factor(here.hessian);
  if (factor.info() != Eigen::Success || !here.gradient.allFinite()) {
    return std::numeric_limits<double>::infinity();
  }
  return 0.5 * here.gradient.dot(factor.solve(here.gradient));
}

/// What rounding leaves of a decrement: the sums behind a value carry some 1e-15 of it.
double reachable(double asked, double value) { return asked + 1e-14 * std::abs(value); }

class TrustRegionCost : public ceres::CostFunction {
 public:
  TrustRegionCost(const Reduced& problem, double floor) : problem_(problem), floor_(floor) {
    set_num_residuals(static_cast<int>(problem.size()) + 1);
    mutable_parameter_block_sizes()->push_back(static_cast<int>(problem.size()));
  }

  bool Evaluate(double const* const* parameters, double* residuals,
                double** jacobians) const override {
    const Eigen::Index n = problem_.size();
    const Vector at = Eigen::Map<const Vector>(parameters[0], n);
    const bool derivatives = jacobians != nullptr && jacobians[0] != nullptr;
    const Evaluated here = problem_.evaluate(at, derivatives ? Want::derivatives : Want::value);
    const double above = here.value - floor_;
    if (!std::isfinite(here.value) || above <= 0.0) {
      return false;  // refused step
    }
    const double first = std::sqrt(2.0 * above);
    std::fill_n(residuals, n + 1, 0.0);
    residuals[0] = first;
    if (derivatives) {
      if (!here.gradient.allFinite() || !here.hessian.allFinite()) {
        return false;
      }
      Eigen::Map<RowMatrix> jacobian(jacobians[0], n + 1, n);
      jacobian.row(0) = here.gradient.transpose() / first;
      jacobian.bottomRows(n) = positive_factor(problem_, at, here).transpose();
      decrement_ = newton_decrement(here);
      value_ = here.value;
    }
    return true;
  }

  bool done(double asked) const { return decrement_ < reachable(asked, value_); }

 private:
  const Reduced& problem_;
  double floor_;
  mutable double decrement_ = std::numeric_limits<double>::infinity();
  mutable double value_ = 0.0;
};

class StopWhenDone : public ceres::IterationCallback {
 public:
  StopWhenDone(const TrustRegionCost& cost, const MinimizerOptions& options)
      : cost_(cost), options_(options) {}
  ceres::CallbackReturnType operator()(const ceres::IterationSummary&) override {
    if (options_.keep_going && !options_.keep_going()) {
      interrupted = true;
      return ceres::SOLVER_ABORT;
    }
    return cost_.done(options_.decrement) ? ceres::SOLVER_TERMINATE_SUCCESSFULLY
                                          : ceres::SOLVER_CONTINUE;
  }
  bool interrupted = false;

 private:
  const TrustRegionCost& cost_;
  const MinimizerOptions& options_;
};

/// One run of the trust region from `at`, which is moved to where it ends; false when interrupted.
bool solve_once(const Reduced& problem, const MinimizerOptions& options, double floor, Vector& at,
                Minimum& out) {
  ceres::Problem::Options problem_options;
  problem_options.cost_function_ownership = ceres::DO_NOT_TAKE_OWNERSHIP;
  ceres::Problem ceres_problem(problem_options);
  TrustRegionCost cost(problem, floor);
  ceres_problem.AddResidualBlock(&cost, nullptr, at.data());
  StopWhenDone stop(cost, options);
  ceres::Solver::Options solver;
  solver.minimizer_type = ceres::TRUST_REGION;
  solver.linear_solver_type = ceres::DENSE_QR;
  solver.max_num_iterations = std::max(1, options.max_iterations - out.iterations);
  // Tolerances are relative to the shifted cost; the callback decides, these only end a stall.
  solver.function_tolerance = 1e-18;
  solver.gradient_tolerance = 1e-16;
  solver.parameter_tolerance = 1e-15;
  solver.initial_trust_region_radius = 1e8;
  solver.max_num_consecutive_invalid_steps = 30;
  solver.logging_type = ceres::SILENT;
  // Even a silent solver complains on stderr; what it has to say is in the report.
  FLAGS_minloglevel = google::GLOG_FATAL;
  solver.num_threads = 1;
  solver.callbacks.push_back(&stop);
  solver.update_state_every_iteration = true;
  ceres::Solver::Summary summary;
  ceres::Solve(solver, &ceres_problem, &summary);
  out.report = summary.BriefReport();
  out.iterations += std::max(0, static_cast<int>(summary.iterations.size()) - 1);
  return !stop.interrupted;
}

/// Newton steps, halved until the value falls; they settle the last digits.
void polish(const Reduced& problem, double target, Vector& at, Evaluated& here) {
  for (int step = 0; step < most_polishing; ++step) {
    const Eigen::LLT<Matrix> factor(here.hessian);
    if (factor.info() != Eigen::Success || newton_decrement(here) < reachable(target, here.value)) {
      return;
    }
    const Vector direction = -factor.solve(here.gradient);
    bool moved = false;
    for (double share = 1.0; share > 1e-3; share *= 0.5) {
      const Vector trial = at + share * direction;
      const Evaluated there = problem.evaluate(trial, Want::derivatives);
      // At the last digits the value no longer tells; the decrement does.
      if (std::isfinite(there.value) &&
          (there.value < here.value || newton_decrement(there) < newton_decrement(here))) {
        at = trial;
        here = there;
        moved = true;
        break;
      }
    }
    if (!moved) {
      return;
    }
  }
}

}  // namespace

Minimum minimize(Objective& objective, const Vector& start, const MinimizerOptions& options) {
  const Reduced problem(objective, start, options.fixed);
  Minimum out;
  out.theta = start;
  Vector at = problem.reduce(start);
  Evaluated here = problem.evaluate(at, Want::derivatives);
  if (!std::isfinite(here.value) || !here.gradient.allFinite()) {
    out.value = here.value;
    out.report = "no finite start";
    return out;
  }
  const double decrement = newton_decrement(here);
  if (problem.size() > 0 && !(decrement < reachable(options.decrement, here.value))) {
    for (int solve = 0; solve < most_solves; ++solve) {
      // Far enough below that the rank-one term stays small, near enough to keep the digits.
      const double gap = newton_decrement(here);
      const double floor =
          here.value - room_below - 1e2 * std::min(std::isfinite(gap) ? gap : 0.0, 1e6);
      out.interrupted = !solve_once(problem, options, floor, at, out);
      here = problem.evaluate(at, Want::derivatives);
      const bool reached_floor = here.value - floor < 0.5 * room_below;
      if (out.interrupted || !reached_floor || out.iterations >= options.max_iterations) {
        break;
      }
      // The value fell so far that c is not below it any more: go on with a lower one.
    }
    if (std::isfinite(here.value) && !out.interrupted) {
      polish(problem, options.decrement, at, here);
    }
  } else {
    out.report = "start is the optimum";
  }
  out.theta = problem.expand(at);
  out.value = here.value;
  out.finite = std::isfinite(here.value) && here.gradient.allFinite() && here.hessian.allFinite();
  out.decrement = newton_decrement(here);
  out.positive_definite = std::isfinite(out.decrement);
  problem.evaluate(at, Want::derivatives);
  out.gradient = problem.last_full().gradient;
  out.hessian = problem.last_full().hessian;
  return out;
}

bool values_agree(Objective& objective, const Minimum& minimum, const std::vector<bool>& fixed) {
  const Reduced problem(objective, minimum.theta, fixed);
  const Vector at = problem.reduce(minimum.theta);
  const Evaluated here = problem.evaluate(at, Want::derivatives);
  const Eigen::LLT<Matrix> factor(here.hessian);
  if (factor.info() != Eigen::Success) {
    return false;
  }
  constexpr double rise = 0.02;  // nats: near enough for the quadratic, far above rounding
  bool agree = true;
  for (int direction = 0; direction < 3; ++direction) {
    // Signs that mix all coordinates, the same in every run.
    Vector sign(at.size());
    for (Eigen::Index i = 0; i < at.size(); ++i) {
      sign[i] = ((i + 1) * (2 * direction + 3)) % 7 < 4 ? 1.0 : -1.0;
    }
    const Vector step =
        std::sqrt(2.0 * rise / static_cast<double>(at.size())) * factor.matrixU().solve(sign);
    const double up = problem.evaluate(at + step, Want::value).value - here.value;
    const double down = problem.evaluate(at - step, Want::value).value - here.value;
    agree = agree && std::abs(0.5 * (up + down) - rise) < 0.5 * rise &&
            std::abs(0.5 * (up - down)) < 0.25 * rise;
  }
  objective.evaluate(minimum.theta, Want::value);
  return agree;
}

}  // namespace softsill

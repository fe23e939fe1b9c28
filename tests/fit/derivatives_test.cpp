// Hand-written first and second derivatives against central differences of fourth order,
// f' = (8 (f(h) - f(-h)) - (f(2h) - f(-2h))) / 12 h + O(h^4).
#include <gtest/gtest.h>

#include <Eigen/Eigenvalues>
#include <cmath>
#include <functional>
#include <limits>
#include <string>
#include <vector>

#include "estimator/fit/objective.hpp"
#include "softsill/random.hpp"
#include "tests/fit/small_cell.hpp"

namespace softsill {
namespace {

using small::Cell;

double difference(const std::function<double(double)>& f, double h) {
  return (8.0 * (f(h) - f(-h)) - (f(2.0 * h) - f(-2.0 * h))) / (12.0 * h);
}

Vector difference(const std::function<Vector(double)>& f, double h) {
  return (8.0 * (f(h) - f(-h)) - (f(2.0 * h) - f(-2.0 * h))) / (12.0 * h);
}

const std::vector<Escape> escapes = {
    {EscapeKind::exponential, 0.7, 1.0},      {EscapeKind::softplus, 0.3, 1.0},
    {EscapeKind::logistic, 0.5, 1.0},         {EscapeKind::rectified_power, 0.02, 2.0},
    {EscapeKind::rectified_power, 1e-3, 5.5}, {EscapeKind::gaussian_tail, 0.1, 1.0}};

enum class Kind { point_process, bins };

std::string name_of(const Escape& escape, Kind kind, double level) {
  return std::string(to_string(escape.kind)) + (kind == Kind::bins ? ", bins" : ", point process") +
         ", x near " + std::to_string(level);
}

constexpr Eigen::Index columns = 3;

SpikeDesign random_design(Kind kind, Eigen::Index nodes, Eigen::Index spikes) {
  RandomStream random(5, 0);
  SpikeDesign design;
  design.nodes.resize(nodes, columns);
  design.weights_ms.resize(nodes);
  design.spikes.resize(spikes, columns);
  for (RowMatrix* rows : {&design.nodes, &design.spikes}) {
    for (Eigen::Index i = 0; i < rows->rows(); ++i) {
      rows->row(i) << 1.0, random.normal(), random.normal();
    }
  }
  for (double& weight : design.weights_ms) {
    weight = 0.3 + random.uniform();
  }
  if (kind == Kind::bins) {
    design.spike_bins_ms = Vector::Constant(spikes, 0.4);
    design.spike_bins_ms[0] = 1.3;
  }
  return design;
}

/// (beta, log lambda_0, log n): the coordinates of a SpikeEvaluation.
SpikeEvaluation evaluate_at(const SpikeDesign& design, Escape escape, const Vector& at, Want want) {
  escape.lambda_0_per_ms = std::exp(at[columns]);
  escape.exponent = std::exp(at[columns + 1]);
  return evaluate_spikes(design, escape, at.head(columns), want, 1);
}

Vector point_near(const Escape& escape, double level) {
  Vector at(columns + 2);
  at << level, 0.4, -0.3, std::log(escape.lambda_0_per_ms), std::log(escape.exponent);
  return at;
}

/// Own parameters have derivatives only where they can be fitted.
Eigen::Index fitted(const Escape& escape) {
  return escape.kind == EscapeKind::exponential       ? columns
         : escape.kind == EscapeKind::rectified_power ? columns + 2
                                                      : columns + 1;
}

/// Checks at one point. The first term of a bound is for h^4, the second for the rounding of a
/// difference, some 1e-16 |f| / h.
void check_spikes(const SpikeDesign& design, const Escape& escape, double level) {
  const Vector at = point_near(escape, level);
  const SpikeEvaluation here = evaluate_at(design, escape, at, Want::derivatives_and_expected);
  ASSERT_TRUE(std::isfinite(here.log_likelihood));
  ASSERT_TRUE(here.gradient.allFinite()) << here.gradient.transpose();
  ASSERT_TRUE(here.information.allFinite()) << here.information;
  ASSERT_TRUE(here.expected.allFinite()) << here.expected;
  const Eigen::Index n = fitted(escape);
  for (Eigen::Index i = 0; i < n; ++i) {
    // log(1 + e^x)^n has fifth derivatives by log n of (n log x)^5 times itself.
    const double h = i == columns + 1 ? 1e-4 : 1e-3;
    const double rounding = 2e-15 / h;
    const auto moved = [&](double step) { return Vector(at + step * Vector::Unit(at.size(), i)); };
    const double slope = difference(
        [&](double step) {
          return evaluate_at(design, escape, moved(step), Want::value).log_likelihood;
        },
        h);
    EXPECT_NEAR(here.gradient[i], slope,
                1e-8 * std::abs(slope) + rounding * std::abs(here.log_likelihood))
        << "gradient " << i;
    const Vector bend = difference(
        [&](double step) {
          return evaluate_at(design, escape, moved(step), Want::derivatives).gradient;
        },
        h);
    for (Eigen::Index j = 0; j < n; ++j) {
      EXPECT_NEAR(-here.information(i, j), bend[j],
                  1e-8 * std::abs(bend[j]) + rounding * here.gradient.cwiseAbs().maxCoeff())
          << "information " << i << " " << j;
    }
  }
  EXPECT_EQ(here.information, here.information.transpose());
  EXPECT_EQ(here.expected, here.expected.transpose());
  // The cheaper questions have the same answers.
  EXPECT_EQ(evaluate_at(design, escape, at, Want::value).log_likelihood, here.log_likelihood);
  EXPECT_EQ(evaluate_at(design, escape, at, Want::gradient).gradient.head(columns),
            here.gradient.head(columns));
}

TEST(SpikeDerivatives, OrdinaryDistances) {
  for (const Escape& escape : escapes) {
    for (Kind kind : {Kind::point_process, Kind::bins}) {
      for (double level : {-6.0, -1.0, 0.0, 2.0}) {
        SCOPED_TRACE(name_of(escape, kind, level));
        check_spikes(random_design(kind, 40, 12), escape, level);
      }
    }
  }
}

void check_extremes(Kind kind) {
  for (const Escape& escape : escapes) {
    for (double level : {-2000.0, -800.0, -300.0, -60.0, -30.0, 30.0, 200.0, 600.0}) {
      SCOPED_TRACE(name_of(escape, kind, level));
      check_spikes(random_design(kind, 40, 12), escape, level);
    }
  }
}

TEST(SpikeDerivatives, ExtremeDistances) { check_extremes(Kind::point_process); }

TEST(SpikeDerivatives, ExtremeDistancesInBins) { check_extremes(Kind::bins); }

// A hazard beyond the largest double is impossible, not a crash and not NaN.
TEST(SpikeDerivatives, OverflowIsMinusInfinity) {
  for (Kind kind : {Kind::point_process, Kind::bins}) {
    const SpikeDesign design = random_design(kind, 4, 3);
    const double value =
        evaluate_at(design, Escape{}, point_near(Escape{}, 1000.0), Want::derivatives)
            .log_likelihood;
    EXPECT_EQ(value, -std::numeric_limits<double>::infinity());
  }
}

// Expected information is what its name says: over a bin that holds a spike with probability p,
// p times a spike's information plus 1 - p times that of an empty bin; over a short stretch of a
// point process, the stretch's own plus w lambda times a spike's.
TEST(SpikeDerivatives, ExpectedInformationIsTheMeanOfObserved) {
  for (const Escape& escape : escapes) {
    for (Kind kind : {Kind::point_process, Kind::bins}) {
      for (double level : {-20.0, -3.0, 0.0, 1.5}) {
        SCOPED_TRACE(name_of(escape, kind, level));
        SpikeDesign node = random_design(kind, 1, 1), spike = node;
        spike.spikes = node.nodes;
        spike.nodes.resize(0, columns);
        spike.weights_ms.resize(0);
        node.spikes.resize(0, columns);
        const double weight = node.weights_ms[0];
        if (kind == Kind::bins) {
          spike.spike_bins_ms[0] = weight;
        }
        const Vector at = point_near(escape, level);
        const SpikeEvaluation of_node =
            evaluate_at(node, escape, at, Want::derivatives_and_expected);
        const SpikeEvaluation of_spike =
            evaluate_at(spike, escape, at, Want::derivatives_and_expected);
        const double m = weight * escape_rate(escape, node.nodes.row(0).dot(at.head(columns)));
        const double p = kind == Kind::bins ? -std::expm1(-m) : m;
        const double rest = kind == Kind::bins ? 1.0 - p : 1.0;
        const Matrix mean = rest * of_node.information + p * of_spike.information;
        const double scale = (rest * of_node.information).cwiseAbs().maxCoeff() +
                             (p * of_spike.information).cwiseAbs().maxCoeff();
        // With bins, every row carries the expectation itself.
        EXPECT_LT((of_node.expected - mean).cwiseAbs().maxCoeff(), 1e-12 * scale);
      }
    }
  }
}

TEST(SpikeDerivatives, SameForAnyNumberOfThreads) {
  const SpikeDesign design = random_design(Kind::point_process, 20000, 300);
  const Vector at = point_near(escapes[4], -1.0);
  const SpikeEvaluation one =
      evaluate_spikes(design, escapes[4], at.head(columns), Want::derivatives_and_expected, 1);
  for (int threads : {2, 3, 7}) {
    const SpikeEvaluation many = evaluate_spikes(design, escapes[4], at.head(columns),
                                                 Want::derivatives_and_expected, threads);
    EXPECT_EQ(one.log_likelihood, many.log_likelihood);
    EXPECT_EQ(one.gradient, many.gradient);
    EXPECT_EQ(one.information, many.information);
    EXPECT_EQ(one.expected, many.expected);
  }
}

/// Compares in units of standard errors: coordinates differ in size by orders of magnitude.
void check_objective(Objective& objective, const Vector& at) {
  // Exponents and time constants bend the likelihood on a scale of their own, however flat it is.
  constexpr double largest_step = 1e-3;
  const Evaluated here = objective.evaluate(at, Want::derivatives_and_expected);
  ASSERT_TRUE(std::isfinite(here.value));
  Vector scale = here.hessian.diagonal().cwiseAbs().cwiseMax(here.expected.diagonal());
  scale = scale.cwiseMax(1e-12 * scale.maxCoeff()).cwiseSqrt();
  double worst_slope = 0.0, worst_bend = 0.0;
  std::string where_slope, where_bend;
  for (Eigen::Index i = 0; i < at.size(); ++i) {
    const double h = std::min(3e-3 / scale[i], largest_step);
    const auto moved = [&](double step) { return Vector(at + step * Vector::Unit(at.size(), i)); };
    const double slope = difference(
        [&](double step) { return objective.evaluate(moved(step), Want::value).value; }, h);
    const double rounding = 2e-15 * std::abs(here.value) / h;
    const double slope_error =
        (std::abs(slope - here.gradient[i]) - rounding) / (scale[i] + std::abs(slope));
    if (!(slope_error <= worst_slope)) {  // NaN must not pass

      worst_slope = slope_error;
      where_slope = std::to_string(i);
    }
    const Vector bend = difference(
        [&](double step) { return objective.evaluate(moved(step), Want::derivatives).gradient; },
        h);
    for (Eigen::Index j = 0; j < at.size(); ++j) {
      const double error = std::abs(bend[j] - here.hessian(j, i)) / scale[i] / scale[j];
      if (!(error <= worst_bend)) {
        worst_bend = error;
        where_bend = std::to_string(j) + " " + std::to_string(i);
      }
    }
  }
  EXPECT_LT(worst_slope, 1e-8) << "gradient at " << where_slope << ", standard errors "
                               << scale.cwiseInverse().transpose();
  EXPECT_LT(worst_bend, 1e-8) << "Hessian at " << where_bend;
  EXPECT_LT((here.hessian - here.hessian.transpose()).cwiseAbs().maxCoeff(),
            1e-12 * here.hessian.cwiseAbs().maxCoeff());
  const Matrix scaled =
      scale.cwiseInverse().asDiagonal() * here.expected * scale.cwiseInverse().asDiagonal();
  EXPECT_GT(scaled.selfadjointView<Eigen::Lower>().eigenvalues().minCoeff(), -1e-10)
      << "expected information must be positive semidefinite";
}

TEST(VoltageDerivatives, AtSeveralPoints) {
  const Cell cell(small::recording(), parse_variant(R"(
      [kappa]
      family = "spline"
      support_ms = 60
      count = 6
      [eta]
      family = "exponentials"
      count = 2)",
                                                    "v.toml"));
  const Coordinates coordinates(cell.variant, true, true);
  const VoltageStatistics statistics = gather_voltage(coordinates.voltage_columns(), cell.exposure,
                                                      cell.recording, cell.variant, 0.0, 400.0, 1);
  const auto p = static_cast<Eigen::Index>(coordinates.voltage_columns().width);
  RandomStream random(9, 0);
  for (double log_sigma : {-2.0, 0.0, 1.0}) {
    for (double atanh_rho : {-0.8, 0.0, 0.9, 3.0}) {
      SCOPED_TRACE("log sigma " + std::to_string(log_sigma) + ", atanh rho " +
                   std::to_string(atanh_rho));
      Vector at(p + 2);
      for (Eigen::Index i = 0; i < p; ++i) {
        at[i] = 0.3 * random.normal();
      }
      at[p] = log_sigma;
      at[p + 1] = atanh_rho;
      struct Potential : Objective {
        const VoltageStatistics* statistics = nullptr;
        Eigen::Index size() const override { return statistics->total.mean.rows() + 1; }
        Evaluated evaluate(const Vector& z, Want) override {
          const Eigen::Index n = z.size() - 2;
          const VoltageEvaluation v = evaluate_voltage(*statistics, z.head(n), z[n], z[n + 1]);
          return {-v.log_likelihood, -v.gradient, v.information, v.expected};
        }
      } objective;
      objective.statistics = &statistics;
      check_objective(objective, at);
      EXPECT_LT((block_scores(statistics, at.head(p), log_sigma, atanh_rho).colwise().sum() +
                 objective.evaluate(at, Want::derivatives).gradient.transpose())
                    .cwiseAbs()
                    .maxCoeff(),
                1e-9 * objective.evaluate(at, Want::derivatives).gradient.cwiseAbs().maxCoeff());
    }
  }
}

const char* const kernel_plans[] = {
    // eta and theta_1 share their columns
    R"(
[kappa]
family = "spline"
support_ms = 60
count = 6
[eta]
family = "spline"
support_ms = 100
count = 5
[theta_1]
family = "spline"
support_ms = 100
count = 5
)",
    // every time constant free; eta's last one is kappa's first
    R"(
[kappa]
family = "exponentials"
count = 2
[eta]
family = "exponentials"
count = 2
with_membrane = true
[theta_1]
family = "exponentials"
count = 1
)",
    // the membrane's time constant free, eta's own held
    R"(
[kappa]
family = "exponentials"
count = 1
[eta]
family = "exponentials"
time_constants_ms = [30]
count = 1
fit_time_constants = false
with_membrane = true
[theta_1]
family = "absent"
)",
    R"(
[kappa]
family = "steps"
edges_ms = [0, 3, 10, 40]
[eta]
family = "absent"
[theta_1]
family = "steps"
edges_ms = [0, 8, 30, 90]
)"};

std::string escape_plan(EscapeKind kind) {
  std::string text = "[escape]\nfunction = \"" + std::string(to_string(kind)) + "\"\n";
  if (kind != EscapeKind::exponential) {
    text += "lambda_0_per_ms = \"fit\"\n";
  }
  if (kind == EscapeKind::rectified_power) {
    text += "exponent = \"fit\"\n";
  }
  return text;
}

void check_cell(bool joint) {
  std::uint64_t stream = 0;
  for (const char* kernels : kernel_plans) {
    for (EscapeKind kind : {EscapeKind::exponential, EscapeKind::softplus, EscapeKind::logistic,
                            EscapeKind::rectified_power, EscapeKind::gaussian_tail}) {
      SCOPED_TRACE(std::string(to_string(kind)) + kernels);
      const Cell cell(small::recording(), parse_variant(kernels + escape_plan(kind), "v.toml"));
      CellObjective objective = cell.objective(joint, joint);
      const Vector at = small::ordinary_point(objective.coordinates(), ++stream);
      check_objective(objective, at);
      // The score's blocks add up to the gradient.
      const Vector gradient = objective.evaluate(at, Want::derivatives).gradient;
      const Matrix scores = objective.scores(at);
      EXPECT_LT((scores.colwise().sum().transpose() + gradient).cwiseAbs().maxCoeff(),
                1e-9 * (1.0 + scores.cwiseAbs().maxCoeff()));
    }
  }
}

TEST(CellDerivatives, SpikesAndVoltage) { check_cell(true); }

TEST(CellDerivatives, SpikesAlone) { check_cell(false); }

TEST(CellDerivatives, Penalised) {
  const Cell cell(small::recording(), parse_variant(kernel_plans[0], "v.toml"));
  CellObjective likelihood = cell.objective(true, false);
  std::vector<Penalty> penalties;
  for (const KernelPart& part : likelihood.coordinates().parts()) {
    penalties.push_back(roughness_penalty(part.name, part.first, part.size()));
    penalties.back().lambda = 30.0 * static_cast<double>(penalties.size());
  }
  Penalised objective(likelihood, penalties);
  check_objective(objective, small::ordinary_point(likelihood.coordinates(), 99));
}

// Time constants come and go through their logits.
TEST(CellDerivatives, TimeConstantsRoundTrip) {
  Variant variant = parse_variant(kernel_plans[1], "v.toml");
  for (KernelPlan* plan : {&variant.kappa, &variant.eta, &variant.theta_1}) {
    plan->shortest_ms = 0.5;
    plan->longest_ms = 500.0;
  }
  const Coordinates coordinates(variant, true, false);
  int found = 0;
  for (std::size_t i = 0; i < coordinates.size(); ++i) {
    if (!coordinates.is_time_constant(i)) {
      continue;
    }
    ++found;
    for (double tau : {0.6, 5.0, 120.0, 480.0}) {
      const double value = coordinates.coordinate_of(i, tau);
      EXPECT_NEAR(coordinates.time_constant(i, value), tau, 1e-12 * tau);
      EXPECT_NEAR(
          difference([&](double h) { return std::log(coordinates.time_constant(i, value + h)); },
                     1e-3),
          coordinates.log_slope(i, value), 1e-9);
    }
    EXPECT_TRUE(coordinates.at_edge(i, 9.0));
    EXPECT_FALSE(coordinates.at_edge(i, coordinates.coordinate_of(i, 400.0)));
  }
  EXPECT_EQ(found, 5);
}

}  // namespace
}  // namespace softsill

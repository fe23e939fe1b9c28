// Cells with known numbers over a grid of softness, rate, moving threshold and potential: what the
// fit finds is as far from the truth as its own standard errors say. Seeds are fixed, so these
// tests give the same numbers in every run; the stated chances are those of a new seed.
#include <gtest/gtest.h>

#include <cmath>
#include <cstdio>
#include <string>
#include <utility>
#include <vector>

#include "softsill/fit.hpp"
#include "tests/recovery/cells.hpp"

namespace softsill::test {
namespace {

struct GridPoint {
  double noise_level_mV, rate_Hz;
  bool moving_threshold, with_voltage;
  double seconds;
};

// Every pair of settings occurs.
const std::vector<GridPoint> grid = {
    {0.7, 5.0, false, true, 60.0},  {0.7, 12.0, true, true, 60.0},  {0.7, 30.0, false, false, 40.0},
    {1.5, 5.0, true, true, 60.0},   {1.5, 12.0, false, true, 60.0}, {1.5, 30.0, true, false, 40.0},
    {3.0, 12.0, true, false, 60.0}, {3.0, 30.0, false, true, 40.0}, {3.0, 5.0, false, false, 60.0},
};

constexpr std::uint64_t grid_seed = 20;

// Two-sided chance of a normal variate beyond 4.5 is 6.8e-6: under 3e-4 for one false alarm in all
// of the 30 scores here.
constexpr double largest_z = 4.5;

struct Scores {
  std::string label;
  FitStatus status = FitStatus::failed;
  std::vector<std::pair<std::string, double>> z;
  std::vector<std::pair<std::string, double>> inside;
};

std::string label_of(const GridPoint& point) {
  char text[128];
  std::snprintf(text, sizeof text, "Delta %.1f mV, %.0f Hz, %s threshold, %s", point.noise_level_mV,
                point.rate_Hz, point.moving_threshold ? "moving" : "fixed",
                point.with_voltage ? "potential" : "spikes alone");
  return text;
}

Scores scores_of(const GridPoint& point, std::uint64_t replicate) {
  Cell cell;
  cell.noise_level_mV = point.noise_level_mV;
  if (!point.moving_threshold) {
    cell.theta_1.clear();
  }
  Protocol protocol;
  protocol.seconds = point.seconds;
  protocol.with_voltage = point.with_voltage;
  set_rate(cell, protocol, point.rate_Hz);
  Variant variant = spline_variant();
  if (!point.moving_threshold) {
    variant.theta_1.family = KernelFamily::absent;
  }
  const Estimate estimate = fit(recording_of(cell, protocol, grid_seed, replicate), variant);
  Scores scores{label_of(point), estimate.status, {}, {}};
  if (!trustworthy(estimate.status)) {
    return scores;
  }
  const Truth truth = truth_of(cell, estimate.mode);
  if (point.with_voltage) {
    scores.z.emplace_back("Delta", z_score(estimate.noise_level, truth.noise_level, true));
    scores.z.emplace_back("E_0", z_score(estimate.resting_potential, truth.resting_potential));
  }
  scores.z.emplace_back("theta_0", z_score(estimate.threshold, truth.threshold));
  const Quantity* resistance = find_row(estimate, "input_resistance", "observed information");
  if (resistance != nullptr) {
    scores.z.emplace_back("resistance", z_score(*resistance, truth.resistance));
  }
  for (const KernelCurve& curve : estimate.kernels) {
    if (curve.why_absent.empty() && curve.kernel.find("_by_") == std::string::npos) {
      scores.inside.emplace_back(curve.kernel, share_inside(cell, estimate, curve));
    }
  }
  return scores;
}

void print(const Scores& scores) {
  std::printf("%s:", scores.label.c_str());
  for (const auto& [name, z] : scores.z) {
    std::printf(" z(%s) %.2f", name.c_str(), z);
  }
  for (const auto& [name, share] : scores.inside) {
    std::printf(" inside(%s) %.2f", name.c_str(), share);
  }
  std::printf("\n");
}

class Grid : public ::testing::Test {
 protected:
  static void SetUpTestSuite() {
    all_ = new std::vector<Scores>;
    for (std::size_t i = 0; i < grid.size(); ++i) {
      all_->push_back(scores_of(grid[i], i));
      print(all_->back());
    }
  }
  static void TearDownTestSuite() { delete all_; }
  static std::vector<Scores>* all_;
};
std::vector<Scores>* Grid::all_ = nullptr;

TEST_F(Grid, ErrorsAreWhatTheStandardErrorsSay) {
  double squares = 0.0, count = 0.0;
  for (const Scores& scores : *all_) {
    EXPECT_EQ(scores.status, FitStatus::converged) << scores.label;
    EXPECT_GE(scores.z.size(), 2u) << scores.label;
    for (const auto& [name, z] : scores.z) {
      EXPECT_LT(std::abs(z), largest_z) << name << " of " << scores.label;
      squares += z * z;
      count += 1.0;
    }
  }
  // Mean of z^2 is 1 with standard deviation sqrt(2 / n), were all scores independent.
  EXPECT_NEAR(squares / count, 1.0, 3.0 * std::sqrt(2.0 / count));
}

TEST_F(Grid, KernelBandsHoldTheTrueKernels) {
  double total = 0.0, count = 0.0;
  for (const Scores& scores : *all_) {
    for (const auto& [name, share] : scores.inside) {
      EXPECT_GE(share, 0.8) << name << " of " << scores.label;
      total += share;
      count += 1.0;
    }
  }
  EXPECT_GE(total / count, 0.9);
}

}  // namespace
}  // namespace softsill::test

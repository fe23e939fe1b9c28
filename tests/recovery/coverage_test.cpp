// 200 replicates of each cell: do 95 % intervals hold the truth 95 % of the time, are estimates
// free of bias, is the consistency check's p-value uniform? Writes coverage.csv beside the program.
#include <gtest/gtest.h>

#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <fstream>
#include <string>
#include <vector>

#include "tests/recovery/coverage.hpp"

namespace softsill::test {
namespace {

/// 200, or what SOFTSILL_REPLICATES says; all limits follow the number.
std::size_t replicates() {
  const char* given = std::getenv("SOFTSILL_REPLICATES");
  return given != nullptr ? std::stoul(given) : 200;
}

CoverageCell cell_of(const std::string& name, double noise_level_mV, bool moving_threshold,
                     bool with_voltage, std::uint64_t seed) {
  CoverageCell plan;
  plan.name = name;
  plan.seed = seed;
  plan.cell.noise_level_mV = noise_level_mV;
  plan.variant = spline_variant();
  if (!moving_threshold) {
    plan.cell.theta_1.clear();
    plan.variant.theta_1.family = KernelFamily::absent;
  }
  plan.protocol.seconds = 90.0;  // about 1000 spikes
  plan.protocol.with_voltage = with_voltage;
  set_rate(plan.cell, plan.protocol, 12.0);
  return plan;
}

std::vector<CoverageCell> coverage_cells() {
  std::vector<CoverageCell> cells = {
      cell_of("splines, moving threshold, potential", 1.5, true, true, 101),
      cell_of("splines, fixed threshold, potential", 0.7, false, true, 102),
      cell_of("splines, moving threshold, spikes alone", 1.5, true, false, 103),
      cell_of("exponentials, fixed threshold, potential", 1.5, false, true, 104),
  };
  cells.back().variant = exponential_variant(cells.back().cell);
  return cells;
}

class Coverage : public ::testing::Test {
 protected:
  static void SetUpTestSuite() {
    std::ofstream table(SOFTSILL_COVERAGE_TABLE);
    table << coverage_header();
    std::printf("%s", coverage_header());
    for (const CoverageCell& cell : coverage_cells()) {
      names_.push_back(cell.name);
      reports_.push_back(measure_coverage(cell, replicates()));
      const std::string rows = coverage_rows("\"" + cell.name + "\"", reports_.back());
      table << rows << std::flush;
      std::printf("%s", rows.c_str());
      std::fflush(stdout);
    }
  }
  static inline std::vector<std::string> names_;
  static inline std::vector<CoverageReport> reports_;
};

/// Numbers with an interval of their own, as printed for people.
const std::vector<std::string> parameters = {"Delta", "E_0", "theta_0", "resistance", "tau_m"};

TEST_F(Coverage, EveryFitConverges) {
  for (std::size_t i = 0; i < reports_.size(); ++i) {
    EXPECT_EQ(reports_[i].trusted, reports_[i].replicates) << names_[i];
  }
}

// Between 93 and 97 %, widened by what chance does to a count with probability 0.001; each cell,
// then all cells together, where chance does less.
TEST_F(Coverage, IntervalsHoldTheTruth) {
  for (const std::string& name : parameters) {
    std::size_t covered = 0, all = 0;
    for (std::size_t i = 0; i < reports_.size(); ++i) {
      const auto found = reports_[i].tallies.find(name);
      if (found == reports_[i].tallies.end()) {
        continue;
      }
      const std::size_t n = found->second.covered.size();
      const auto count =
          static_cast<std::size_t>(std::lround(found->second.coverage() * static_cast<double>(n)));
      const CountLimits limits = count_limits(n, 0.93, 0.97);
      EXPECT_GE(count, limits.fewest) << name << " of " << names_[i] << ", " << n;
      EXPECT_LE(count, limits.most) << name << " of " << names_[i] << ", " << n;
      covered += count;
      all += n;
    }
    ASSERT_GT(all, 0u) << name;
    const CountLimits limits = count_limits(all, 0.93, 0.97);
    EXPECT_GE(covered, limits.fewest) << name << " of all cells, " << all;
    EXPECT_LE(covered, limits.most) << name << " of all cells, " << all;
  }
}

// Bands are promised on average over lags (Marra & Wood 2012, Scand. J. Stat. 39:53), so the mean
// share is compared, with its own measured standard error.
TEST_F(Coverage, KernelBandsHoldTheTruthOnAverage) {
  for (std::size_t i = 0; i < reports_.size(); ++i) {
    for (const auto& [name, tally] : reports_[i].tallies) {
      if (name.rfind("kernel ", 0) == 0) {
        const double slack = 3.29 * tally.standard_error();
        EXPECT_GE(tally.coverage(), 0.93 - slack) << name << " of " << names_[i];
        EXPECT_LE(tally.coverage(), 0.97 + slack) << name << " of " << names_[i];
      }
    }
  }
}

TEST_F(Coverage, NoiseLevelIsUnbiased) {
  for (std::size_t i = 0; i < reports_.size(); ++i) {
    const auto found = reports_[i].tallies.find("Delta");
    if (found != reports_[i].tallies.end()) {
      EXPECT_GT(reports_[i].mean_spikes, 800.0) << names_[i];
      EXPECT_LT(std::abs(found->second.relative_bias()), 0.02) << names_[i];
    }
  }
}

TEST_F(Coverage, ConsistencyCheckKeepsItsLevel) {
  std::size_t tested = 0;
  for (std::size_t i = 0; i < reports_.size(); ++i) {
    if (!reports_[i].p_values.empty()) {
      ++tested;
      const double p = uniform_p_value(reports_[i].p_values);
      std::printf("p-values of the consistency check uniform in \"%s\": p = %.4f\n",
                  names_[i].c_str(), p);
      EXPECT_GT(p, 0.001) << names_[i];
    }
  }
  EXPECT_EQ(tested, 2u) << "both spline cells with a potential";
}

}  // namespace
}  // namespace softsill::test

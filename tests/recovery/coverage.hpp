#pragma once

// Many replicates of one simulated cell, fitted in parallel, and what their intervals were worth.

#include <cstddef>
#include <map>
#include <string>
#include <vector>

#include "softsill/variant.hpp"
#include "tests/recovery/cells.hpp"

namespace softsill::test {

struct CoverageCell {
  std::string name;
  Cell cell;
  Protocol protocol;
  Variant variant;
  std::uint64_t seed = 1;
};

/// One parameter (or kernel) over the replicates of a cell.
struct Tally {
  double truth = 0.0;
  std::vector<double> estimate;  ///< empty for kernels
  std::vector<double> z;
  std::vector<double> covered;  ///< 1 or 0; kernels: share of lags inside the band

  double coverage() const;
  double standard_error() const;  ///< of coverage(), from the spread over replicates
  double mean_z() const;
  double sd_z() const;
  double relative_bias() const;
};

struct CoverageReport {
  std::map<std::string, Tally> tallies;
  std::vector<double> p_values;  ///< of the consistency check of kappa
  std::size_t replicates = 0, trusted = 0;
  double mean_spikes = 0.0;
};

/// Fits every replicate with options.threads = 1 on all cores. Results depend on the cell's seed
/// alone.
CoverageReport measure_coverage(const CoverageCell& cell, std::size_t replicates);

/// Lines of coverage.csv for one cell, without the header.
std::string coverage_rows(const std::string& name, const CoverageReport& report);
const char* coverage_header();

/// Limits on the number of successes out of n that a coverage within [low, high] breaks with
/// probability under 0.001 in all (exact binomial tails).
struct CountLimits {
  std::size_t fewest = 0, most = 0;
};
CountLimits count_limits(std::size_t n, double low, double high);

/// p-value of the hypothesis that the sample is uniform on [0, 1] (Kolmogorov's limit with
/// Stephens' (1970, J. R. Stat. Soc. B 32:115) correction for small samples).
double uniform_p_value(std::vector<double> sample);

}  // namespace softsill::test

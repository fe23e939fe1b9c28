#include "tests/recovery/coverage.hpp"

#include <algorithm>
#include <atomic>
#include <boost/math/distributions/binomial.hpp>
#include <cmath>
#include <cstdio>
#include <limits>
#include <numeric>
#include <thread>

#include "softsill/fit.hpp"

namespace softsill::test {
namespace {

constexpr const char* observed = "observed information";
constexpr const char* robust = "robust sandwich";

/// What one replicate says about one quantity.
struct Outcome {
  double truth, estimate, z, covered;
};

struct Replicate {
  std::map<std::string, Outcome> outcomes;
  double p_value = std::numeric_limits<double>::quiet_NaN();
  std::size_t spikes = 0;
  bool trusted = false;
};

Outcome outcome_of(const Quantity& quantity, double truth, bool log_scale) {
  const bool bounded = quantity.low && quantity.high;
  return {truth, quantity.value.value_or(std::numeric_limits<double>::quiet_NaN()),
          z_score(quantity, truth, log_scale),
          bounded && *quantity.low <= truth && truth <= *quantity.high ? 1.0 : 0.0};
}

Replicate run(const CoverageCell& plan, std::size_t index) {
  const Recording recording = recording_of(plan.cell, plan.protocol, plan.seed, index);
  FitOptions options;
  options.threads = 1;
  const Estimate estimate = fit(recording, plan.variant, options);
  Replicate out;
  out.spikes = estimate.spikes;
  out.trusted = trustworthy(estimate.status);
  if (!out.trusted) {
    return out;
  }
  const Truth truth = truth_of(plan.cell, estimate.mode);
  auto add = [&](const std::string& name, const Quantity* quantity, double value,
                 bool log_scale = false) {
    if (quantity != nullptr) {
      out.outcomes[name] = outcome_of(*quantity, value, log_scale);
    }
  };
  if (estimate.mode == FitMode::spikes_and_voltage) {
    add("Delta", &estimate.noise_level, truth.noise_level, true);
    add("Delta (observed)", find_row(estimate, "noise_level", observed), truth.noise_level, true);
    add("Delta (robust)", find_row(estimate, "noise_level", robust), truth.noise_level, true);
    add("E_0", &estimate.resting_potential, truth.resting_potential);
  }
  add("theta_0", &estimate.threshold, truth.threshold);
  add("resistance", find_row(estimate, "input_resistance", observed), truth.resistance);
  if (plan.variant.kappa.family == KernelFamily::exponentials) {
    add("tau_m", find_row(estimate, "kappa.time_constant[1]"), plan.cell.tau_m_ms);
  }
  for (const char* name : {"kappa", "eta", "theta_1", "eta_minus_theta_1"}) {
    const KernelCurve* curve = find_curve(estimate, name);
    if (curve != nullptr && curve->why_absent.empty()) {
      const double none = std::numeric_limits<double>::quiet_NaN();
      out.outcomes[std::string("kernel ") + name] = {none, none, none,
                                                     share_inside(plan.cell, estimate, *curve)};
    }
  }
  if (estimate.kappa_consistency.tested) {
    out.p_value = estimate.kappa_consistency.p_value;
  }
  return out;
}

double mean(const std::vector<double>& values) {
  return std::accumulate(values.begin(), values.end(), 0.0) / static_cast<double>(values.size());
}

double deviation(const std::vector<double>& values) {
  const double centre = mean(values);
  double squares = 0.0;
  for (double value : values) {
    squares += (value - centre) * (value - centre);
  }
  return std::sqrt(squares / static_cast<double>(values.size() - 1));
}

}  // namespace

double Tally::coverage() const { return mean(covered); }
double Tally::standard_error() const {
  return deviation(covered) / std::sqrt(static_cast<double>(covered.size()));
}
double Tally::mean_z() const { return mean(z); }
double Tally::sd_z() const { return deviation(z); }
double Tally::relative_bias() const { return mean(estimate) / truth - 1.0; }

CoverageReport measure_coverage(const CoverageCell& cell, std::size_t replicates) {
  std::vector<Replicate> done(replicates);
  std::atomic<std::size_t> next{0};
  std::vector<std::thread> workers;
  for (unsigned i = 0; i < std::max(1u, std::thread::hardware_concurrency()); ++i) {
    workers.emplace_back([&] {
      for (std::size_t index = next++; index < replicates; index = next++) {
        done[index] = run(cell, index);
      }
    });
  }
  for (std::thread& worker : workers) {
    worker.join();
  }
  CoverageReport report;
  report.replicates = replicates;
  for (const Replicate& each : done) {
    report.mean_spikes += static_cast<double>(each.spikes) / static_cast<double>(replicates);
    report.trusted += each.trusted ? 1 : 0;
    if (std::isfinite(each.p_value)) {
      report.p_values.push_back(each.p_value);
    }
    for (const auto& [name, outcome] : each.outcomes) {
      Tally& tally = report.tallies[name];
      tally.truth = outcome.truth;
      tally.covered.push_back(outcome.covered);
      if (std::isfinite(outcome.estimate)) {
        tally.estimate.push_back(outcome.estimate);
        tally.z.push_back(outcome.z);
      }
    }
  }
  return report;
}

const char* coverage_header() {
  return "cell,quantity,replicates,coverage,standard_error,truth,mean_estimate,mean_z,sd_z\n";
}

std::string coverage_rows(const std::string& name, const CoverageReport& report) {
  std::string rows;
  for (const auto& [quantity, tally] : report.tallies) {
    char text[256];
    std::snprintf(text, sizeof text, "%s,%s,%zu,%.4f,%.4f", name.c_str(), quantity.c_str(),
                  tally.covered.size(), tally.coverage(), tally.standard_error());
    rows += text;
    if (tally.estimate.empty()) {
      rows += ",,,,\n";
      continue;
    }
    std::snprintf(text, sizeof text, ",%.6g,%.6g,%.3f,%.3f\n", tally.truth, mean(tally.estimate),
                  tally.mean_z(), tally.sd_z());
    rows += text;
  }
  return rows;
}

CountLimits count_limits(std::size_t n, double low, double high) {
  constexpr double tail = 0.0005;
  const double trials = static_cast<double>(n);
  const boost::math::binomial worst(trials, low), best(trials, high);
  CountLimits limits{0, n};
  while (boost::math::cdf(worst, static_cast<double>(limits.fewest)) < tail) {
    ++limits.fewest;
  }
  while (limits.most > 0 && boost::math::cdf(boost::math::complement(
                                best, static_cast<double>(limits.most - 1))) < tail) {
    --limits.most;
  }
  return limits;
}

double uniform_p_value(std::vector<double> sample) {
  std::sort(sample.begin(), sample.end());
  const double n = static_cast<double>(sample.size());
  double distance = 0.0;
  for (std::size_t i = 0; i < sample.size(); ++i) {
    const double place = static_cast<double>(i);
    distance = std::max({distance, (place + 1.0) / n - sample[i], sample[i] - place / n});
  }
  const double root = std::sqrt(n);
  const double scaled = distance * (root + 0.12 + 0.11 / root);
  double p = 0.0;
  for (int k = 1; k <= 100; ++k) {
    p += (k % 2 == 1 ? 2.0 : -2.0) * std::exp(-2.0 * k * k * scaled * scaled);
  }
  return scaled < 0.2 ? 1.0 : std::clamp(p, 0.0, 1.0);
}

}  // namespace softsill::test

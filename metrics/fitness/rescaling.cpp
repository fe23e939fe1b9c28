#include "softsill/metrics/rescaling.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>

#include "metrics/inference/normal.hpp"
#include "softsill/error.hpp"
#include "softsill/random.hpp"

namespace softsill::metrics {
namespace {

std::string edge_rule(bool history_known) {
  return history_known
             ? "counted from the beginning of each trial; the stretch after the last spike left out"
             : "only complete intervals between spikes; both ends of each trial left out";
}

}  // namespace

void Rescaled::append(const Rescaled& other) {
  z.insert(z.end(), other.z.begin(), other.z.end());
  trials += other.trials;
  left_out += other.left_out;
  if (edges.empty()) {
    edges = other.edges;
  } else if (edges != other.edges && other.trials > 0) {
    throw Error("", "rescaled intervals", "trials with different rules for their ends are mixed");
  }
}

std::vector<double> Rescaled::uniforms() const {
  std::vector<double> u(z.size());
  std::transform(z.begin(), z.end(), u.begin(), [](double value) { return -std::expm1(-value); });
  return u;
}

Rescaled rescale(std::span<const double> integral_at_spikes, bool history_known) {
  Rescaled result;
  result.trials = 1;
  result.edges = edge_rule(history_known);
  double before = 0.0;
  for (std::size_t i = 0; i < integral_at_spikes.size(); ++i) {
    const double integral = integral_at_spikes[i];
    if (!std::isfinite(integral) || integral < before) {
      throw Error("", "integrated hazard, spike " + std::to_string(i + 1),
                  "it must be finite, start at 0 or more, and never fall");
    }
    if (i > 0 || history_known) {
      result.z.push_back(integral - before);
    }
    before = integral;
  }
  result.left_out = history_known || integral_at_spikes.empty() ? 1 : 2;
  return result;
}

Rescaled rescale_rows(std::span<const double> expected, std::span<const unsigned char> spike,
                      std::uint64_t seed, std::uint64_t stream, bool history_known) {
  if (expected.size() != spike.size()) {
    throw Error("", "rows of the hazard", "there must be as many rows of spikes as of hazard");
  }
  Rescaled result;
  result.trials = 1;
  result.edges = edge_rule(history_known);
  RandomStream random(seed, stream);
  double sum = 0.0;
  bool seen = history_known, any = false;
  for (std::size_t row = 0; row < expected.size(); ++row) {
    const double q = expected[row];
    if (!std::isfinite(q) || q < 0.0) {
      throw Error("", "rows of the hazard, row " + std::to_string(row + 1),
                  "the expected count must be finite and not negative");
    }
    if (spike[row] == 0) {
      sum += q;
      continue;
    }
    // The draw is taken even for intervals that are left out: results then do not depend on the
    // rule for the ends.
    const double within = -std::log1p(random.uniform() * std::expm1(-q));
    if (seen) {
      result.z.push_back(sum + within);
    }
    seen = any = true;
    sum = 0.0;
  }
  result.left_out = history_known || !any ? 1 : 2;
  return result;
}

double bootstrap_p_value(double statistic, std::span<const double> simulated) {
  if (simulated.empty()) {
    throw Error("", "parametric bootstrap", "it needs at least one simulation");
  }
  const auto large = std::count_if(simulated.begin(), simulated.end(),
                                   [&](double value) { return value >= statistic; });
  return static_cast<double>(1 + large) / static_cast<double>(1 + simulated.size());
}

SerialDependence serial_dependence(std::span<const std::vector<double>> trials, std::size_t lags,
                                   double level) {
  if (lags == 0 || !(level > 0.0 && level < 1.0)) {
    throw Error("", "serial dependence", "it needs at least one lag, and a level between 0 and 1");
  }
  // Normal value with the same tail: from whichever tail is the smaller, so that none is lost.
  const auto to_normal = [](double z) {
    return z > std::numbers::ln2 ? -normal_quantile(std::exp(-z))
                                 : normal_quantile(-std::expm1(-z));
  };
  std::vector<std::vector<double>> normal;
  for (const std::vector<double>& trial : trials) {
    std::vector<double>& values = normal.emplace_back();
    for (const double z : trial) {
      // exp(-700) is near the smallest number there is.
      values.push_back(to_normal(std::clamp(z, 1e-300, 700.0)));
    }
  }
  SerialDependence result;
  result.level = level;
  double largest = 0.0;
  for (std::size_t lag = 1; lag <= lags; ++lag) {
    double products = 0.0, squares_1 = 0.0, squares_2 = 0.0, pairs = 0.0;
    for (const std::vector<double>& values : normal) {
      for (std::size_t i = lag; i < values.size(); ++i) {
        // Mean 0 is part of the hypothesis and is not estimated.
        products += values[i] * values[i - lag];
        squares_1 += values[i] * values[i];
        squares_2 += values[i - lag] * values[i - lag];
        pairs += 1.0;
      }
    }
    if (!(squares_1 > 0.0) || !(squares_2 > 0.0)) {
      break;
    }
    result.correlation.push_back(products / std::sqrt(squares_1 * squares_2));
    largest = std::max(largest, std::abs(result.correlation.back()) * std::sqrt(pairs));
    if (lag == 1) {
      result.band = normal_quantile(0.5 + 0.5 * level) / std::sqrt(pairs);
    }
  }
  if (!result.correlation.empty()) {
    const double one = 2.0 * normal_cdf(-largest);
    result.p_value = -std::expm1(static_cast<double>(result.correlation.size()) * std::log1p(-one));
  }
  return result;
}

double bits_per_spike(double log_likelihood, std::size_t spikes, double duration_ms,
                      double reference_per_ms) {
  if (spikes == 0) {
    throw Error("", "bits per spike", "there are no spikes to score");
  }
  if (!(duration_ms > 0.0) || !(reference_per_ms > 0.0) || !std::isfinite(duration_ms) ||
      !std::isfinite(reference_per_ms)) {
    throw Error("", "bits per spike", "duration and reference rate must be positive");
  }
  const auto count = static_cast<double>(spikes);
  const double constant = count * std::log(reference_per_ms) - reference_per_ms * duration_ms;
  return (log_likelihood - constant) / (count * std::numbers::ln2);
}

}  // namespace softsill::metrics

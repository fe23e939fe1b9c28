// Measures that rest on sums over pairs of spikes: Victor-Purpura, van Rossum, Schreiber, event
// reliability.

#include <algorithm>
#include <cmath>
#include <limits>

#include "metrics/trains/inner.hpp"
#include "softsill/error.hpp"

namespace softsill::metrics {
namespace inner {

double victor_purpura(Train a, Train b, double cost_per_ms, std::vector<double>& row) {
  // Cost = n + m - the best total saving; a pair at distance d saves 2 - q d, so only pairs closer
  // than 2 / q matter and everything outside that band is copied, not computed. row[j] is the best
  // saving of the spikes of `a` seen so far with the first j of `b`; beyond `filled` it is flat.
  const std::size_t n = a.size(), m = b.size();
  const double reach = 2.0 / cost_per_ms;  // infinite at cost 0
  row.resize(m + 1);
  row[0] = 0.0;
  std::size_t low = 0, high = 0, filled = 0;
  for (std::size_t i = 0; i < n; ++i) {
    while (low < m && a[i] - b[low] >= reach) {
      ++low;
    }
    high = std::max(high, low);
    while (high < m && b[high] - a[i] < reach) {
      ++high;
    }
    for (; filled < high; ++filled) {
      row[filled + 1] = row[filled];
    }
    double diagonal = row[low], left = diagonal;
    for (std::size_t j = low; j < high; ++j) {
      const double above = row[j + 1];
      const double saved = 2.0 - cost_per_ms * std::abs(a[i] - b[j]);
      left = std::max(std::max(above, left), diagonal + saved);
      row[j + 1] = left;
      diagonal = above;
    }
    // high never falls, so whatever lies beyond the band is exactly the flat part.
  }
  double exact = 0.0;
  if (std::isinf(cost_per_ms)) {
    for (std::size_t i = 0, j = 0; i < n && j < m;) {
      exact += a[i] == b[j] ? 2.0 : 0.0;
      const bool advance_a = a[i] <= b[j], advance_b = b[j] <= a[i];
      i += advance_a;
      j += advance_b;
    }
  }
  const double saving = std::isinf(cost_per_ms) ? exact : row[filled];
  return static_cast<double>(n + m) - saving;
}

double exponential_self(Train train, double tau_ms) {
  double running = 0.0, sum = static_cast<double>(train.size());
  for (std::size_t i = 1; i < train.size(); ++i) {
    running = (1.0 + running) * std::exp((train[i - 1] - train[i]) / tau_ms);
    sum += 2.0 * running;
  }
  return sum;
}

double exponential_cross(Train a, Train b, double tau_ms) {
  // Both trains in one pass; each keeps its decayed sum at the latest spike of either.
  const std::size_t n = a.size(), m = b.size();
  if (n == 0 || m == 0) {
    return 0.0;
  }
  const double rate = 1.0 / tau_ms;
  double now = std::min(a[0], b[0]), sum_a = 0.0, sum_b = 0.0, sum = 0.0;
  std::size_t i = 0, j = 0;
  while (i < n && j < m) {
    const bool from_a = a[i] <= b[j];
    const double next = from_a ? a[i] : b[j];
    const double decay = std::exp((now - next) * rate);
    sum_a *= decay;
    sum_b *= decay;
    sum += from_a ? sum_b : sum_a;
    sum_a += from_a;
    sum_b += !from_a;
    i += from_a;
    j += !from_a;
    now = next;
  }
  double left = i < n ? sum_b : sum_a;
  const Train rest = i < n ? a.subspan(i) : b.subspan(j);
  for (const double time : rest) {
    left *= std::exp((now - time) * rate);
    if (left < 1e-300) {
      break;
    }
    sum += left;
    now = time;
  }
  return sum;
}

double gaussian_cross(Train a, Train b, double sigma_ms) {
  const double scale = -0.25 / (sigma_ms * sigma_ms);
  const double reach = 2.0 * sigma_ms * std::sqrt(40.0);
  double sum = 0.0;
  std::size_t low = 0;
  for (const double time : a) {
    while (low < b.size() && time - b[low] > reach) {
      ++low;
    }
    for (std::size_t j = low; j < b.size() && b[j] - time <= reach; ++j) {
      const double gap = time - b[j];
      sum += std::exp(scale * gap * gap);
    }
  }
  return sum;
}

namespace {

double one_way_reliability(Train a, Train b, double rate) {
  double sum = 0.0;
  std::size_t next = 0;
  for (const double time : a) {
    while (next < b.size() && b[next] < time) {
      ++next;
    }
    double gap = std::numeric_limits<double>::infinity();
    if (next < b.size()) {
      gap = b[next] - time;
    }
    if (next > 0) {
      gap = std::min(gap, time - b[next - 1]);
    }
    sum += std::exp(-gap * rate);
  }
  return sum / static_cast<double>(a.size());
}

}  // namespace

double event_reliability(Train a, Train b, double tau_ms) {
  if (a.empty() || b.empty()) {
    return a.empty() && b.empty() ? std::numeric_limits<double>::quiet_NaN() : 0.0;
  }
  return 0.5 * (one_way_reliability(a, b, 1.0 / tau_ms) + one_way_reliability(b, a, 1.0 / tau_ms));
}

}  // namespace inner

namespace {

constexpr double infinity = std::numeric_limits<double>::infinity();

// Distances without a window still ask for sorted, finite times without doubles.
void check_pair(Train a, Train b) {
  const Window everything{-std::numeric_limits<double>::max(), infinity};
  check_train(a, everything, "first train");
  check_train(b, everything, "second train");
}

void check_positive(double value, const char* name) {
  if (!(value > 0.0) || !std::isfinite(value)) {
    throw Error("", name, "it must be a positive number of ms");
  }
}

void check_cost(double cost_per_s) {
  if (!(cost_per_s >= 0.0)) {
    throw Error("", "cost of moving a spike", "it must be 0 or more per second, and a number");
  }
}

double over_spikes(double value, Train a, Train b, double share) {
  const auto spikes = static_cast<double>(a.size() + b.size());
  return spikes > 0.0 ? value / (share * spikes) : 0.0;
}

}  // namespace

double victor_purpura(Train a, Train b, double cost_per_s) {
  check_pair(a, b);
  check_cost(cost_per_s);
  std::vector<double> row;
  return inner::victor_purpura(a, b, 1e-3 * cost_per_s, row);
}

double victor_purpura_normalised(Train a, Train b, double cost_per_s) {
  return over_spikes(victor_purpura(a, b, cost_per_s), a, b, 1.0);
}

double van_rossum_squared(Train a, Train b, double tau_ms) {
  check_pair(a, b);
  check_positive(tau_ms, "time constant of the van Rossum distance");
  const double squared =
      0.5 * (inner::exponential_self(a, tau_ms) + inner::exponential_self(b, tau_ms)) -
      inner::exponential_cross(a, b, tau_ms);
  return std::max(0.0, squared);
}

double van_rossum_normalised(Train a, Train b, double tau_ms) {
  return over_spikes(van_rossum_squared(a, b, tau_ms), a, b, 0.5);
}

std::optional<double> schreiber(Train a, Train b, double sigma_ms) {
  check_pair(a, b);
  check_positive(sigma_ms, "width of the Gaussian");
  if (a.empty() || b.empty()) {
    return {};
  }
  return inner::gaussian_cross(a, b, sigma_ms) /
         std::sqrt(inner::gaussian_cross(a, a, sigma_ms) * inner::gaussian_cross(b, b, sigma_ms));
}

std::optional<double> event_reliability(Train a, Train b, double tau_ms) {
  check_pair(a, b);
  check_positive(tau_ms, "time constant of the event reliability");
  const double value = inner::event_reliability(a, b, tau_ms);
  return std::isnan(value) ? std::nullopt : std::optional(value);
}

}  // namespace softsill::metrics

// Measures that are time averages of a profile: ISI-distance and SPIKE-distance.

#include <algorithm>
#include <cmath>
#include <limits>

#include "metrics/trains/inner.hpp"
#include "softsill/error.hpp"

namespace softsill::metrics {
namespace inner {
namespace {

constexpr double undefined = std::numeric_limits<double>::quiet_NaN();

// Interval k of a train with n spikes runs from spike k - 1 to spike k; intervals 0 and n are cut
// off by the ends of the window.
struct Intervals {
  Train train;
  Window window;
  EdgeRule edges;

  double start(std::size_t k) const { return k == 0 ? window.begin_ms : train[k - 1]; }
  double end(std::size_t k) const { return k == train.size() ? window.end_ms : train[k]; }
  double length(std::size_t k) const {
    const double seen = end(k) - start(k);
    if (edges != EdgeRule::longer_of_neighbours || train.size() < 2) {
      return seen;
    }
    if (k == 0) {
      return std::max(seen, train[1] - train[0]);
    }
    if (k == train.size()) {
      return std::max(seen, train[k - 1] - train[k - 2]);
    }
    return seen;
  }
};

// Where the average is taken; empty (begin >= end) when the rule leaves nothing.
Window averaged(Train a, Train b, const Window& window, EdgeRule edges) {
  if (edges == EdgeRule::auxiliary_spikes) {
    return window;
  }
  if (a.empty() || b.empty()) {
    return {0.0, 0.0};
  }
  if (edges == EdgeRule::longer_of_neighbours) {
    return window;
  }
  return {std::max(a.front(), b.front()), std::min(a.back(), b.back())};
}

std::size_t first_interval(const Intervals& train, double time) {
  return static_cast<std::size_t>(std::upper_bound(train.train.begin(), train.train.end(), time) -
                                  train.train.begin());
}

// Nearest spike of `others` for each of `times`; both sorted, others not empty.
void nearest(std::span<const double> times, std::span<const double> others,
             std::vector<double>& distance) {
  distance.resize(times.size());
  std::size_t next = 0;
  for (std::size_t i = 0; i < times.size(); ++i) {
    while (next < others.size() && others[next] < times[i]) {
      ++next;
    }
    double gap = std::numeric_limits<double>::infinity();
    if (next < others.size()) {
      gap = others[next] - times[i];
    }
    if (next > 0) {
      gap = std::min(gap, times[i] - others[next - 1]);
    }
    distance[i] = gap;
  }
}

void with_ends(Train train, const Window& window, std::vector<double>& times) {
  times.resize(train.size() + 2);
  times.front() = window.begin_ms;
  std::copy(train.begin(), train.end(), times.begin() + 1);
  times.back() = window.end_ms;
}

}  // namespace

double isi_distance(Train a, Train b, const Window& window, EdgeRule edges) {
  const Window span = averaged(a, b, window, edges);
  if (!(span.end_ms > span.begin_ms)) {
    return undefined;
  }
  const Intervals first{a, window, edges}, second{b, window, edges};
  std::size_t i = first_interval(first, span.begin_ms), j = first_interval(second, span.begin_ms);
  double now = span.begin_ms, sum = 0.0;
  double x = first.length(i), y = second.length(j);
  double x_end = first.end(i), y_end = second.end(j);
  while (true) {
    const double next = std::min(x_end, y_end);
    const double longer = std::max(x, y);
    sum += (next - now) * (longer - std::min(x, y)) / longer;
    if (next >= span.end_ms) {
      break;
    }
    now = next;
    if (x_end <= now) {
      ++i;
      x = first.length(i);
      x_end = first.end(i);
    }
    if (y_end <= now) {
      ++j;
      y = second.length(j);
      y_end = second.end(j);
    }
  }
  return sum / span.length_ms();
}

double spike_distance(Train a, Train b, const Window& window, EdgeRule edges,
                      SpikeScratch& scratch) {
  const Window span = averaged(a, b, window, edges);
  if (!(span.end_ms > span.begin_ms)) {
    return undefined;
  }
  with_ends(a, window, scratch.a_times);
  with_ends(b, window, scratch.b_times);
  const std::span<const double> a_all(scratch.a_times), b_all(scratch.b_times);
  if (edges == EdgeRule::auxiliary_spikes) {
    nearest(a_all, b_all, scratch.a_nearest);
    nearest(b_all, a_all, scratch.b_nearest);
  } else {
    // Only real spikes are neighbours; what stands for the spike beyond an end inherits.
    nearest(a_all, b, scratch.a_nearest);
    nearest(b_all, a, scratch.b_nearest);
    for (std::vector<double>* d : {&scratch.a_nearest, &scratch.b_nearest}) {
      d->front() = (*d)[1];
      d->back() = (*d)[d->size() - 2];
    }
  }
  struct Side {
    std::size_t k;
    double length, end, value, slope;
  };
  const Intervals first{a, window, edges}, second{b, window, edges};
  const auto enter = [](const Intervals& train, const std::vector<double>& d, std::size_t k,
                        double now) {
    const double start = train.start(k), end = train.end(k);
    const double slope = end > start ? (d[k + 1] - d[k]) / (end - start) : 0.0;
    return Side{k, train.length(k), end, d[k] + slope * (now - start), slope};
  };
  double now = span.begin_ms, sum = 0.0;
  Side p = enter(first, scratch.a_nearest, first_interval(first, now), now);
  Side q = enter(second, scratch.b_nearest, first_interval(second, now), now);
  while (true) {
    const double next = std::min(p.end, q.end), step = next - now;
    const double total = p.length + q.length;
    const double at_start = p.value * q.length + q.value * p.length;
    p.value += p.slope * step;
    q.value += q.slope * step;
    const double at_end = p.value * q.length + q.value * p.length;
    // Trapezoid of (S_1 x_2 + S_2 x_1) / (2 m^2), m = total / 2.
    sum += step * (at_start + at_end) / (total * total);
    if (next >= span.end_ms) {
      break;
    }
    now = next;
    if (p.end <= now) {
      p = enter(first, scratch.a_nearest, p.k + 1, now);
    }
    if (q.end <= now) {
      q = enter(second, scratch.b_nearest, q.k + 1, now);
    }
  }
  return sum / span.length_ms();
}

}  // namespace inner

namespace {

void check_pair(Train a, Train b, const Window& window) {
  check_window(window);
  check_train(a, window, "first train");
  check_train(b, window, "second train");
}

std::optional<double> defined(double value) {
  return std::isnan(value) ? std::nullopt : std::optional(value);
}

}  // namespace

std::optional<double> isi_distance(Train a, Train b, const Window& window, EdgeRule edges) {
  check_pair(a, b, window);
  return defined(inner::isi_distance(a, b, window, edges));
}

std::optional<double> spike_distance(Train a, Train b, const Window& window, EdgeRule edges) {
  check_pair(a, b, window);
  inner::SpikeScratch scratch;
  return defined(inner::spike_distance(a, b, window, edges, scratch));
}

}  // namespace softsill::metrics

#include "softsill/metrics/free_run.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <numeric>
#include <span>

#include "softsill/error.hpp"

namespace softsill::metrics {
namespace {

using Trials = std::span<const std::vector<double>>;

std::vector<double> sorted_intervals(Trials trials) {
  std::vector<double> intervals;
  for (const std::vector<double>& train : trials) {
    for (std::size_t i = 1; i < train.size(); ++i) {
      intervals.push_back(train[i] - train[i - 1]);
    }
  }
  std::sort(intervals.begin(), intervals.end());
  return intervals;
}

// Largest distance of two empirical distributions; both sorted, neither empty.
double largest_distance(const std::vector<double>& a, const std::vector<double>& b) {
  double largest = 0.0;
  std::size_t i = 0, j = 0;
  while (i < a.size() && j < b.size()) {
    const double next = std::min(a[i], b[j]);
    while (i < a.size() && a[i] == next) {
      ++i;
    }
    while (j < b.size() && b[j] == next) {
      ++j;
    }
    largest = std::max(largest, std::abs(static_cast<double>(i) / static_cast<double>(a.size()) -
                                         static_cast<double>(j) / static_cast<double>(b.size())));
  }
  return largest;
}

double spikes_in(Trials trials) {
  return std::accumulate(trials.begin(), trials.end(), 0.0,
                         [](double sum, const std::vector<double>& train) {
                           return sum + static_cast<double>(train.size());
                         });
}

std::string sentence(const FreeRun& run, std::size_t trials) {
  char text[240];
  if (run.runaway_trials > 0) {
    std::snprintf(text, sizeof text,
                  "%zu of %zu free-running trials ran away: the model does not keep the cell's "
                  "rate, whatever the rescaling test says",
                  run.runaway_trials, trials);
  } else if (run.silent_trials > 0 && 2 * run.silent_trials >= trials) {
    std::snprintf(text, sizeof text,
                  "%zu of %zu free-running trials fell silent: the model does not keep the cell's "
                  "rate, whatever the rescaling test says",
                  run.silent_trials, trials);
  } else {
    std::snprintf(text, sizeof text, "running free the model fires at %.3g Hz, the cell at %.3g Hz",
                  run.model.rate_hz, run.cell.rate_hz);
  }
  return text;
}

}  // namespace

IntervalLaw interval_law(const TrialSet& set) {
  check_trials(set, "set");
  IntervalLaw law;
  law.rate_hz = set.mean_rate_hz();
  const std::vector<double> intervals = sorted_intervals(set.trains_ms);
  law.intervals = intervals.size();
  if (intervals.size() < 2) {
    return law;
  }
  const auto n = static_cast<double>(intervals.size());
  const double mean = std::accumulate(intervals.begin(), intervals.end(), 0.0) / n;
  double squares = 0.0;
  for (const double interval : intervals) {
    squares += (interval - mean) * (interval - mean);
  }
  law.mean_ms = mean;
  law.cv = std::sqrt(squares / (n - 1.0)) / mean;
  return law;
}

FreeRun compare_free_run(const TrialSet& cell, const TrialSet& model,
                         const std::vector<std::size_t>& stopped_trials,
                         const FreeRunSettings& settings) {
  if (cell.trains_ms.empty() || model.trains_ms.empty()) {
    throw Error("", "free run", "it needs trials of the cell and of the model");
  }
  FreeRun run;
  run.cell = interval_law(cell);
  run.model = interval_law(model);
  run.rate_ratio = run.cell.rate_hz > 0.0 ? run.model.rate_hz / run.cell.rate_hz : 0.0;
  for (std::size_t trial = 0; trial < model.size(); ++trial) {
    const bool stopped =
        std::find(stopped_trials.begin(), stopped_trials.end(), trial) != stopped_trials.end();
    const double rate =
        1000.0 * static_cast<double>(model.trains_ms[trial].size()) / model.window.length_ms();
    // 10 Hz more as well: a cell with a handful of spikes has model trials with thrice as many.
    const bool away =
        rate > settings.runaway_ratio * run.cell.rate_hz && rate > run.cell.rate_hz + 10.0;
    run.runaway_trials += stopped || away;
    run.silent_trials += !stopped && rate < settings.silent_ratio * run.cell.rate_hz;
  }
  // Runs of as many model trials as the cell has show how far chance goes.
  const Trials all(model.trains_ms);
  const std::size_t size = cell.size(), runs = model.size() / size;
  const std::vector<double> cell_intervals = sorted_intervals(cell.trains_ms);
  const std::vector<double> model_intervals = sorted_intervals(all);
  if (!cell_intervals.empty() && !model_intervals.empty()) {
    run.interval_distance = largest_distance(cell_intervals, model_intervals);
  }
  if (runs >= 20) {
    const double cell_rate = spikes_in(cell.trains_ms) / cell.window.length_ms();
    const double mean =
        spikes_in(all) / static_cast<double>(model.size()) * static_cast<double>(size);
    std::size_t far_rate = 0, far_law = 0, with_law = 0;
    for (std::size_t r = 0; r < runs; ++r) {
      const Trials part = all.subspan(r * size, size);
      far_rate +=
          std::abs(spikes_in(part) - mean) >= std::abs(cell_rate * model.window.length_ms() - mean);
      const std::vector<double> intervals = sorted_intervals(part);
      if (run.interval_distance && !intervals.empty()) {
        ++with_law;
        far_law += largest_distance(intervals, model_intervals) >= *run.interval_distance;
      }
    }
    run.rate_p_value = static_cast<double>(1 + far_rate) / static_cast<double>(1 + runs);
    if (with_law >= 20) {
      run.interval_p_value = static_cast<double>(1 + far_law) / static_cast<double>(1 + with_law);
    }
  }
  run.keeps_rate = run.runaway_trials == 0 && run.rate_ratio >= settings.silent_ratio &&
                   run.rate_ratio <= settings.runaway_ratio && 2 * run.silent_trials < model.size();
  run.finding = sentence(run, model.size());
  return run;
}

}  // namespace softsill::metrics

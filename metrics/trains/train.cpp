#include "softsill/metrics/train.hpp"

#include <cmath>
#include <cstdio>

#include "softsill/error.hpp"

namespace softsill::metrics {
namespace {

std::string in_ms(double value) {
  char text[40];
  std::snprintf(text, sizeof text, "%.10g ms", value);
  return text;
}

}  // namespace

std::size_t TrialSet::spike_count() const {
  std::size_t count = 0;
  for (const std::vector<double>& train : trains_ms) {
    count += train.size();
  }
  return count;
}

double TrialSet::mean_rate_hz() const {
  return trains_ms.empty() ? 0.0
                           : 1000.0 * static_cast<double>(spike_count()) /
                                 (static_cast<double>(size()) * window.length_ms());
}

void check_window(const Window& window) {
  if (!std::isfinite(window.begin_ms) || !std::isfinite(window.end_ms) ||
      !(window.end_ms > window.begin_ms)) {
    throw Error("", "window",
                "it runs from " + in_ms(window.begin_ms) + " to " + in_ms(window.end_ms),
                "give an end that is later than the beginning");
  }
}

void check_train(Train train, const Window& window, const std::string& name) {
  for (std::size_t i = 0; i < train.size(); ++i) {
    const double time = train[i];
    const bool in_order = i == 0 || time > train[i - 1];
    if (in_order && time >= window.begin_ms && time < window.end_ms && std::isfinite(time)) {
      continue;  // words are made only for what is wrong: every measure comes through here
    }
    const std::string place = name + ", spike " + std::to_string(i + 1);
    if (!std::isfinite(time)) {
      throw Error("", place, "the time is not a finite number");
    }
    if (i > 0 && time < train[i - 1]) {
      throw Error("", place,
                  "at " + in_ms(time) + " it comes before the spike listed above it (" +
                      in_ms(train[i - 1]) + ")",
                  "sort the times");
    }
    if (i > 0 && time == train[i - 1]) {
      throw Error("", place, "the spike at " + in_ms(time) + " is listed twice", "remove doubles");
    }
    if (time < window.begin_ms) {
      throw Error("", place,
                  (time < 0.0 && window.begin_ms == 0.0)
                      ? "the time " + in_ms(time) + " is negative"
                      : "at " + in_ms(time) + " it lies before the window, which begins at " +
                            in_ms(window.begin_ms),
                  "times count from the beginning of the window");
    }
    if (time >= window.end_ms) {
      throw Error(
          "", place,
          "at " + in_ms(time) + " it lies past the window, which ends at " + in_ms(window.end_ms),
          "check that times are in ms");
    }
  }
}

void check_trials(const TrialSet& set, const std::string& name) {
  check_window(set.window);
  for (std::size_t trial = 0; trial < set.size(); ++trial) {
    check_train(set.trains_ms[trial], set.window, name + ", trial " + std::to_string(trial + 1));
  }
}

}  // namespace softsill::metrics

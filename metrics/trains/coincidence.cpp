#include "softsill/metrics/coincidence.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>

#include "metrics/trains/inner.hpp"
#include "softsill/error.hpp"
#include "softsill/random.hpp"

namespace softsill::metrics {
namespace inner {

double coincidences(Train reference, Train predicted, double window_ms, CountingRule rule) {
  // Times on a sampling grid differ by D in the eyes of a person but not of the last bit.
  const double reach = window_ms + 1e-9;
  const std::size_t n = reference.size(), m = predicted.size();
  std::size_t count = 0;
  if (rule == CountingRule::one_to_one) {
    std::size_t i = 0, j = 0;
    while (i < n && j < m) {
      const double gap = predicted[j] - reference[i];
      const bool close = std::abs(gap) <= reach;
      count += close;
      i += close || gap > 0.0;
      j += close || gap <= 0.0;
    }
  } else {
    std::size_t low = 0, high = 0;
    for (std::size_t i = 0; i < n; ++i) {
      while (low < m && reference[i] - predicted[low] > reach) {
        ++low;
      }
      high = std::max(high, low);
      while (high < m && predicted[high] - reference[i] <= reach) {
        ++high;
      }
      count += rule == CountingRule::pairs ? high - low : static_cast<std::size_t>(high > low);
    }
  }
  return static_cast<double>(count);
}

}  // namespace inner

namespace {

void check(const CoincidenceSettings& settings) {
  if (!(settings.window_ms > 0.0) || !std::isfinite(settings.window_ms)) {
    throw Error("", "coincidence window", "it must be longer than 0 ms", "4 ms is usual");
  }
  if (settings.chance == ChanceTerm::simulated && settings.chance_draws == 0) {
    throw Error("", "chance term", "a simulated chance term needs at least one draw");
  }
}

double simulated_chance(Train reference, std::size_t spikes, const Window& window,
                        const CoincidenceSettings& settings) {
  std::vector<double> train(spikes);
  double sum = 0.0;
  for (std::size_t draw = 0; draw < settings.chance_draws; ++draw) {
    RandomStream random(settings.seed, draw);
    for (double& time : train) {
      time = window.begin_ms + window.length_ms() * random.uniform();
    }
    std::sort(train.begin(), train.end());
    sum += inner::coincidences(reference, train, settings.window_ms, settings.rule);
  }
  return sum / static_cast<double>(settings.chance_draws);
}

}  // namespace

std::string describe(const CoincidenceSettings& settings) {
  char width[40];
  std::snprintf(width, sizeof width, "+-%g ms, ", settings.window_ms);
  std::string text = width;
  switch (settings.rule) {
    case CountingRule::one_to_one:
      text += "one-to-one in time order";
      break;
    case CountingRule::pairs:
      text += "every pair counts";
      break;
    case CountingRule::at_least_one:
      text += "reference spikes with a partner";
      break;
  }
  return text + (settings.chance == ChanceTerm::formula
                     ? ", chance 2 nu D N_reference with nu the predicted rate"
                     : ", chance simulated with Poisson trains of the predicted count");
}

double count_coincidences(Train reference, Train predicted, double window_ms, CountingRule rule) {
  CoincidenceSettings settings;
  settings.window_ms = window_ms;
  check(settings);
  return inner::coincidences(reference, predicted, window_ms, rule);
}

Coincidence coincidence_factor(Train reference, Train predicted, const Window& window,
                               const CoincidenceSettings& settings) {
  check_window(window);
  check_train(reference, window, "reference train");
  check_train(predicted, window, "predicted train");
  check(settings);
  Coincidence result;
  result.convention = describe(settings);
  result.reference_spikes = reference.size();
  result.predicted_spikes = predicted.size();
  result.coincidences =
      inner::coincidences(reference, predicted, settings.window_ms, settings.rule);
  const auto n = static_cast<double>(reference.size());
  const auto m = static_cast<double>(predicted.size());
  if (reference.empty() && predicted.empty()) {
    result.absence = "both trains are empty";
    return result;
  }
  double chance_share = 2.0 * settings.window_ms * m / window.length_ms();
  result.chance = chance_share * n;
  if (settings.chance == ChanceTerm::simulated && !reference.empty()) {
    result.chance = simulated_chance(reference, predicted.size(), window, settings);
    chance_share = result.chance / n;
  }
  if (chance_share >= 1.0) {
    result.absence =
        "chance alone would fill every window (2 nu D >= 1): use a shorter coincidence window";
    return result;
  }
  result.gamma = (result.coincidences - result.chance) / (0.5 * (n + m)) / (1.0 - chance_share);
  return result;
}

}  // namespace softsill::metrics

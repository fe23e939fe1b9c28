#include "softsill/metrics/bootstrap.hpp"

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <limits>
#include <numeric>
#include <utility>

#include "metrics/inference/intervals.hpp"
#include "metrics/inference/normal.hpp"
#include "softsill/error.hpp"
#include "softsill/random.hpp"

namespace softsill::metrics {
namespace {

constexpr double undefined = std::numeric_limits<double>::quiet_NaN();
// Times the replicates are resampled for the Monte Carlo error of the ends: an error known to
// about 9 % of itself.
constexpr std::size_t end_resamples = 60;

using Weights = std::span<const double>;

void check(const Resampling& resampling, std::size_t units) {
  if (!(resampling.block >= 1.0) || !std::isfinite(resampling.block)) {
    throw Error("", "bootstrap", "runs of resampled time must be at least one unit long");
  }
  if (resampling.kind == Resampling::Kind::block &&
      resampling.block != std::floor(resampling.block)) {
    throw Error("", "bootstrap", "blocks of fixed length need a whole number of units");
  }
  if (units > 0 && resampling.block > static_cast<double>(units)) {
    throw Error("", "bootstrap", "runs of resampled time are longer than the recording");
  }
}

void check(const BootstrapOptions& options, std::size_t first, std::size_t second) {
  if (options.replicates < 100) {
    throw Error("", "bootstrap", "fewer than 100 replicates give no interval", "2000 are usual");
  }
  if (!(options.level > 0.0 && options.level < 1.0)) {
    throw Error("", "bootstrap", "the level of an interval lies between 0 and 1", "0.95 is usual");
  }
  check(options.first, first);
  check(options.second, second);
  if (options.method == IntervalMethod::studentised &&
      (options.first.kind != Resampling::Kind::independent ||
       options.second.kind != Resampling::Kind::independent)) {
    throw Error("", "bootstrap", "studentised intervals need exchangeable units, such as trials",
                "use BCa for stretches of time");
  }
}

void draw(const Resampling& resampling, RandomStream& random, std::vector<double>& weights) {
  std::fill(weights.begin(), weights.end(), 0.0);
  const std::uint64_t units = weights.size();
  if (units == 0) {
    return;
  }
  if (resampling.kind == Resampling::Kind::independent) {
    for (std::size_t i = 0; i < units; ++i) {
      weights[random.below(units)] += 1.0;
    }
    return;
  }
  const bool fixed = resampling.kind == Resampling::Kind::block;
  const auto length = static_cast<std::size_t>(resampling.block);
  const double stop = 1.0 / resampling.block;
  std::uint64_t place = 0;
  for (std::size_t i = 0; i < units; ++i) {
    const bool jump = i == 0 || (fixed ? i % length == 0 : random.uniform() < stop);
    place = jump ? random.below(units) : (place + 1 == units ? 0 : place + 1);
    weights[place] += 1.0;
  }
}

// Streams of the two groups of one replicate; replicates and groups never share one.
RandomStream stream_of(std::uint64_t seed, std::size_t replicate, int group) {
  return {seed, 2 * static_cast<std::uint64_t>(replicate) + static_cast<std::uint64_t>(group)};
}

// Statistic with one copy of each drawn unit of a group left out; `copies` says how many copies a
// value stands for. Stretches of time go a run at a time.
struct LeftOut {
  std::vector<double> values, copies;
};

LeftOut leave_out(const WeightedStatistic& statistic, std::vector<double>& varied, Weights fixed,
                  bool varied_is_first, std::size_t run) {
  LeftOut result;
  for (std::size_t begin = 0; begin < varied.size(); begin += run) {
    const std::size_t end = std::min(varied.size(), begin + run);
    if (run == 1 && varied[begin] == 0.0) {
      continue;
    }
    const std::vector<double> kept(varied.begin() + static_cast<std::ptrdiff_t>(begin),
                                   varied.begin() + static_cast<std::ptrdiff_t>(end));
    for (std::size_t i = begin; i < end; ++i) {
      varied[i] = std::max(0.0, varied[i] - 1.0);
    }
    const double value = varied_is_first ? statistic(varied, fixed) : statistic(fixed, varied);
    std::copy(kept.begin(), kept.end(), varied.begin() + static_cast<std::ptrdiff_t>(begin));
    if (std::isfinite(value)) {
      result.values.push_back(value);
      result.copies.push_back(run == 1 ? kept.front() : 1.0);
    }
  }
  return result;
}

// Variance by leaving out one copy at a time (Efron & Stein 1981).
double copy_variance(const LeftOut& left_out) {
  const double n = std::accumulate(left_out.copies.begin(), left_out.copies.end(), 0.0);
  if (n < 2.0) {
    return 0.0;
  }
  double mean = 0.0, squares = 0.0;
  for (std::size_t i = 0; i < left_out.values.size(); ++i) {
    mean += left_out.copies[i] * left_out.values[i] / n;
  }
  for (std::size_t i = 0; i < left_out.values.size(); ++i) {
    const double gap = left_out.values[i] - mean;
    squares += left_out.copies[i] * gap * gap;
  }
  return squares * (n - 1.0) / n;
}

double copy_error(const WeightedStatistic& statistic, std::vector<double>& first,
                  std::vector<double>& second) {
  return std::sqrt(copy_variance(leave_out(statistic, first, second, true, 1)) +
                   copy_variance(leave_out(statistic, second, first, false, 1)));
}

std::string too_few(std::size_t units, const Resampling& resampling, std::size_t fewest) {
  if (units == 0) {
    return {};
  }
  const bool trials = resampling.kind == Resampling::Kind::independent;
  const double independent = static_cast<double>(units) / resampling.block;
  if (independent >= static_cast<double>(fewest)) {
    return {};
  }
  char text[200];
  if (trials) {
    std::snprintf(text, sizeof text,
                  "only %zu trials: at least %zu are needed for their spread to say something "
                  "about other trials",
                  units, fewest);
  } else {
    std::snprintf(text, sizeof text,
                  "the recording holds only %.1f stretches that can be taken as independent; at "
                  "least %zu are needed",
                  independent, fewest);
  }
  return text;
}

// Standard deviation of the ends when the replicates are themselves resampled.
void monte_carlo_errors(std::span<const double> sorted, const inner::Recipe& recipe,
                        std::uint64_t seed, Interval& interval) {
  const std::size_t count = sorted.size();
  std::vector<std::uint32_t> copies(count);
  std::vector<double> again(count);
  double sums[4] = {0.0, 0.0, 0.0, 0.0};
  std::size_t usable = 0;
  for (std::size_t k = 0; k < end_resamples; ++k) {
    // Top half of the stream numbers: replicates never get there.
    RandomStream random(seed, (std::uint64_t{1} << 63) + k);
    std::fill(copies.begin(), copies.end(), 0u);
    for (std::size_t i = 0; i < count; ++i) {
      ++copies[random.below(count)];
    }
    std::size_t filled = 0;
    for (std::size_t i = 0; i < count; ++i) {
      for (std::uint32_t c = 0; c < copies[i]; ++c) {
        again[filled++] = sorted[i];
      }
    }
    const auto [low, high] = inner::ends(again, recipe);
    if (!std::isfinite(low) || !std::isfinite(high)) {
      continue;
    }
    ++usable;
    const double l = low - interval.low, h = high - interval.high;
    sums[0] += l;
    sums[1] += l * l;
    sums[2] += h;
    sums[3] += h * h;
  }
  if (usable < 2) {
    return;
  }
  const auto n = static_cast<double>(usable);
  interval.low_error = std::sqrt(std::max(0.0, (sums[1] - sums[0] * sums[0] / n) / (n - 1.0)));
  interval.high_error = std::sqrt(std::max(0.0, (sums[3] - sums[2] * sums[2] / n) / (n - 1.0)));
}

void find_interval(Bootstrap& result, const inner::Recipe& recipe) {
  std::vector<double> sorted = result.replicates;
  std::sort(sorted.begin(), sorted.end());
  const double share = inner::share_below(sorted, recipe.estimate);
  result.bias_correction = normal_quantile(share);
  if (recipe.method == IntervalMethod::bca && (share <= 0.0 || share >= 1.0)) {
    result.absence = "all replicates lie on one side of the estimate, so its bias cannot be judged";
    return;
  }
  if (recipe.method == IntervalMethod::studentised) {
    if (!(recipe.error > 0.0)) {
      result.absence = "the standard error of the estimate is 0, so nothing can be studentised";
      return;
    }
    for (std::size_t i = 0; i < sorted.size(); ++i) {
      sorted[i] = (result.replicates[i] - recipe.estimate) / result.replicate_errors[i];
    }
    std::sort(sorted.begin(), sorted.end());
  }
  const auto [low, high] = inner::ends(sorted, recipe);
  Interval interval{low, high};
  monte_carlo_errors(sorted, recipe, result.seed, interval);
  result.interval = interval;
  const auto [low_level, high_level] = inner::levels(recipe, result.bias_correction);
  const double count = static_cast<double>(sorted.size()) + 1.0;
  if (count * low_level < 1.0 || count * (1.0 - high_level) < 1.0) {
    result.warnings.push_back("an end lies beyond the outermost replicate: use more replicates");
  } else if (std::max(interval.low_error, interval.high_error) > 0.05 * (high - low)) {
    result.warnings.push_back(
        "the Monte Carlo error of an end is above 5 % of the width: use more replicates");
  }
}

}  // namespace

std::optional<std::string> coverage_warning(std::size_t trials, IntervalMethod method) {
  if (trials >= 20) {
    return {};
  }
  return "with " + std::to_string(trials) + " trials a " + name_of(method) + " interval " +
         few_trials_words;
}

std::vector<double> draw_weights(std::size_t units, const Resampling& resampling,
                                 std::uint64_t seed, std::size_t replicate, int group) {
  check(resampling, units);
  std::vector<double> weights(units);
  RandomStream random = stream_of(seed, replicate, group);
  draw(resampling, random, weights);
  return weights;
}

Bootstrap bootstrap(std::size_t first_units, std::size_t second_units,
                    const WeightedStatistic& statistic, const BootstrapOptions& options) {
  check(options, first_units, second_units);
  Bootstrap result;
  result.seed = options.seed;
  result.method = options.method;
  result.level = options.level;
  std::vector<double> first(first_units, 1.0), second(second_units, 1.0);
  result.estimate = first_units > 0 ? statistic(first, second) : undefined;
  if (!std::isfinite(result.estimate)) {
    result.estimate = undefined;
    result.absence = "the quantity is undefined for these data";
    return result;
  }
  for (const std::string& reason : {too_few(first_units, options.first, options.fewest_units),
                                    too_few(second_units, options.second, options.fewest_units)}) {
    if (!reason.empty()) {
      result.absence = reason;
      return result;
    }
  }
  const bool studentised = options.method == IntervalMethod::studentised;
  inner::Recipe recipe{options.method, options.level, result.estimate, 0.0, 0.0};
  if (studentised) {
    recipe.error = copy_error(statistic, first, second);
  } else if (options.method == IntervalMethod::bca) {
    const auto run = [](const Resampling& r) { return static_cast<std::size_t>(r.block); };
    const LeftOut one = leave_out(statistic, first, second, true, run(options.first));
    const LeftOut two = leave_out(statistic, second, first, false, run(options.second));
    recipe.acceleration = acceleration(one.values, two.values);
  }
  result.acceleration = recipe.acceleration;

  result.replicates.reserve(options.replicates);
  double sum = 0.0, squares = 0.0;
  for (std::size_t r = 0; r < options.replicates; ++r) {
    RandomStream first_random = stream_of(options.seed, r, 0);
    draw(options.first, first_random, first);
    if (second_units > 0) {
      RandomStream second_random = stream_of(options.seed, r, 1);
      draw(options.second, second_random, second);
    }
    const double value = statistic(first, second);
    const double error =
        studentised && std::isfinite(value) ? copy_error(statistic, first, second) : 1.0;
    if (!std::isfinite(value) || !(error > 0.0)) {
      ++result.undefined;
      continue;
    }
    result.replicates.push_back(value);
    if (studentised) {
      result.replicate_errors.push_back(error);
    }
    sum += value - result.estimate;
    squares += (value - result.estimate) * (value - result.estimate);
  }
  if (100 * result.undefined > options.replicates) {
    result.absence = "the quantity is undefined in " + std::to_string(result.undefined) + " of " +
                     std::to_string(options.replicates) + " resamples";
    return result;
  }
  const auto count = static_cast<double>(result.replicates.size());
  result.bias = sum / count;
  result.standard_error = std::sqrt(std::max(0.0, (squares - sum * sum / count) / (count - 1.0)));
  find_interval(result, recipe);
  for (const auto& [units, resampling] :
       {std::pair(first_units, options.first), std::pair(second_units, options.second)}) {
    if (units > 0 && resampling.kind == Resampling::Kind::independent && result.interval) {
      if (const auto warning = coverage_warning(units, options.method)) {
        result.warnings.push_back(*warning);
      }
    }
  }
  return result;
}

Bootstrap bootstrap_ratio(std::size_t first_units, std::size_t second_units,
                          const WeightedStatistic& numerator, const WeightedStatistic& denominator,
                          const BootstrapOptions& options) {
  const auto ratio = [&](Weights first, Weights second) {
    const double below = denominator(first, second);
    return below > 0.0 ? numerator(first, second) / below : undefined;
  };
  Bootstrap result = bootstrap(first_units, second_units, ratio, options);
  // The denominator's own spread from a coarser run on the same streams.
  BootstrapOptions coarse = options;
  coarse.method = IntervalMethod::percentile;
  coarse.replicates = std::min<std::size_t>(options.replicates, 500);
  const Bootstrap below = bootstrap(first_units, second_units, denominator, coarse);
  if (std::isfinite(below.estimate) && below.estimate <= 0.0) {
    result.absence = "the denominator is not positive, so the ratio says nothing";
  } else if (below.interval && below.estimate < 3.0 * below.standard_error) {
    result.warnings.push_back(
        "the denominator is within 3 standard errors of 0: the ratio is unstable");
  }
  return result;
}

}  // namespace softsill::metrics

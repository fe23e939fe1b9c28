#include "estimator/recording/quality_measures.hpp"

#include <algorithm>
#include <cmath>

namespace softsill {

namespace {

constexpr double fewest_blocks = 6;
constexpr double most_blocks = 20;
constexpr double shortest_block_ms = 500.0;
constexpr double spikes_per_block = 5.0;
constexpr std::size_t samples_per_median = 20000;

/// Calls visit(begin, end) with sample ranges inside `samples` that lie further than `before_ms`
/// before and `after_ms` after every spike.
template <typename Visit>
void visit_away_from_spikes(const Sweep& sweep, SampleRange samples, double before_ms,
                            double after_ms, const Visit& visit) {
  const auto index = [&](double time_ms) {
    const double i = std::ceil((time_ms - sweep.start_ms) / sweep.step_ms);
    return i <= 0.0 ? std::size_t{0} : std::min(sweep.input.size(), static_cast<std::size_t>(i));
  };
  std::size_t from = samples.begin;
  const double begin_ms = sweep.start_ms + sweep.step_ms * static_cast<double>(samples.begin);
  // One sample of slack: the comparison below decides.
  const auto first_spike = std::lower_bound(sweep.spikes_ms.begin(), sweep.spikes_ms.end(),
                                            begin_ms - after_ms - sweep.step_ms);
  for (auto at = first_spike; at != sweep.spikes_ms.end(); ++at) {
    const double spike = *at;
    const std::size_t stop = index(spike - before_ms);
    const std::size_t resume = index(spike + after_ms);
    if (resume <= from) {
      continue;
    }
    if (stop >= samples.end) {
      break;
    }
    if (stop > from) {
      visit(from, stop);
    }
    from = resume;
  }
  if (from < samples.end) {
    visit(from, samples.end);
  }
}

std::optional<double> median_away_from_spikes(const Sweep& sweep,
                                              const std::vector<SampleRange>& ranges) {
  std::size_t total = 0;
  for (const SampleRange& range : ranges) {
    visit_away_from_spikes(sweep, range, 2.0, 10.0,
                           [&](std::size_t begin, std::size_t end) { total += end - begin; });
  }
  if (total == 0) {
    return std::nullopt;
  }
  const std::size_t stride = std::max<std::size_t>(1, total / samples_per_median);
  std::vector<double> chosen;
  std::size_t phase = 0;
  for (const SampleRange& range : ranges) {
    visit_away_from_spikes(sweep, range, 2.0, 10.0, [&](std::size_t begin, std::size_t end) {
      for (std::size_t i = begin; i < end; ++i) {
        if (phase++ % stride == 0) {
          chosen.push_back(sweep.voltage_mV[i]);
        }
      }
    });
  }
  return median(chosen);
}

SampleRange samples_of(const Sweep& sweep, const Interval& interval) {
  const auto index = [&](double time_ms) {
    // The tolerance keeps 0.3 / 0.1 = 2.9999... from costing a sample.
    const double i = std::ceil((time_ms - sweep.start_ms) / sweep.step_ms - 1e-6);
    return i <= 0.0 ? std::size_t{0} : std::min(sweep.input.size(), static_cast<std::size_t>(i));
  };
  return {index(interval.begin_ms), index(interval.end_ms)};
}

/// A stretch of one sweep between two times, with its place on the recording's analysed time.
struct Block {
  const Sweep* sweep = nullptr;
  std::vector<Interval> analysed;
  double length_ms = 0.0;
  double middle_min = 0.0;
};

/// Blocks of about `target_ms` analysed time; every sweep is cut into equal shares.
std::vector<Block> cut_into_blocks(const Recording& recording, double target_ms) {
  std::vector<Block> blocks;
  double elapsed_ms = 0.0;
  for (const Sweep& sweep : recording.sweeps) {
    const double total = analysed_ms(sweep);
    const auto count = std::max(1.0, std::floor(total / target_ms + 0.5));
    const double share = total / count;
    Block block;
    const auto finish = [&] {
      if (block.length_ms >= 0.5 * std::min(target_ms, share)) {
        block.sweep = &sweep;
        block.middle_min = (elapsed_ms + 0.5 * block.length_ms) / 6e4;
        blocks.push_back(block);
      }
      elapsed_ms += block.length_ms;
      block = Block{};
    };
    for (const Interval& interval : sweep.analysed) {
      double from = interval.begin_ms;
      while (interval.end_ms - from > 1e-9 * total) {
        const double take = std::min(interval.end_ms - from, share - block.length_ms);
        block.analysed.push_back({from, from + take});
        block.length_ms += take;
        from += take;
        if (block.length_ms >= share * (1.0 - 1e-9)) {
          finish();
        }
      }
    }
    if (block.length_ms > 0.0) {
      finish();
    }
  }
  return blocks;
}

std::optional<Drift> drift_of(const std::vector<double>& minutes,
                              const std::vector<double>& values) {
  if (static_cast<double>(values.size()) < fewest_blocks) {
    return std::nullopt;
  }
  Drift drift;
  drift.blocks = values.size();
  drift.change_per_min = least_squares_slope(minutes, values);
  drift.total_change = drift.change_per_min * (minutes.back() - minutes.front());
  drift.p_value = order_correlation_p(values);
  return drift;
}

}  // namespace

double analysed_ms(const Sweep& sweep) {
  double total = 0.0;
  for (const Interval& interval : sweep.analysed) {
    total += interval.length_ms();
  }
  return total;
}

std::vector<SampleRange> analysed_samples(const Sweep& sweep) {
  std::vector<SampleRange> ranges;
  for (const Interval& interval : sweep.analysed) {
    const SampleRange range = samples_of(sweep, interval);
    if (range.begin < range.end) {
      ranges.push_back(range);
    }
  }
  return ranges;
}

std::span<const double> spikes_within(const Sweep& sweep, const Interval& interval) {
  const auto begin =
      std::lower_bound(sweep.spikes_ms.begin(), sweep.spikes_ms.end(), interval.begin_ms);
  const auto end = std::lower_bound(begin, sweep.spikes_ms.end(), interval.end_ms);
  return {begin, end};
}

std::vector<double> spike_intervals(const Sweep& sweep) {
  std::vector<double> intervals;
  for (const Interval& interval : sweep.analysed) {
    const std::span<const double> spikes = spikes_within(sweep, interval);
    for (std::size_t i = 1; i < spikes.size(); ++i) {
      intervals.push_back(spikes[i] - spikes[i - 1]);
    }
  }
  return intervals;
}

std::optional<double> coefficient_of_variation(std::span<const double> intervals) {
  if (intervals.size() < 2) {
    return std::nullopt;
  }
  double mean = 0.0;
  for (const double value : intervals) {
    mean += value / static_cast<double>(intervals.size());
  }
  double variance = 0.0;
  for (const double value : intervals) {
    variance += (value - mean) * (value - mean) / static_cast<double>(intervals.size());
  }
  return std::sqrt(variance) / mean;
}

InputQuality measure_input(const Sweep& sweep) {
  InputQuality quality;
  const std::vector<SampleRange> ranges = analysed_samples(sweep);
  std::vector<std::span<const double>> pieces;
  std::size_t count = 0;
  double sum = 0.0;
  bool first = true;
  for (const SampleRange& range : ranges) {
    const auto piece = std::span(sweep.input).subspan(range.begin, range.end - range.begin);
    for (const double value : piece) {
      sum += value;
      quality.minimum = first ? value : std::min(quality.minimum, value);
      quality.maximum = first ? value : std::max(quality.maximum, value);
      first = false;
    }
    count += piece.size();
    pieces.push_back(piece);
  }
  if (count == 0) {
    return quality;
  }
  quality.mean = sum / static_cast<double>(count);
  double squares = 0.0;
  for (const auto& piece : pieces) {
    for (const double value : piece) {
      squares += (value - quality.mean) * (value - quality.mean);
    }
  }
  quality.standard_deviation = std::sqrt(squares / static_cast<double>(count));
  if (!constant_input(quality)) {
    const Spectrum spectrum = describe_spectrum(pieces, sweep.step_ms, quality.mean);
    quality.correlation_time_ms = spectrum.correlation_time_ms;
    quality.bandwidth_Hz = spectrum.bandwidth_Hz;
  }
  return quality;
}

bool constant_input(const InputQuality& input) {
  const double size = std::max(std::abs(input.minimum), std::abs(input.maximum));
  return input.maximum - input.minimum <= 1e-9 * size;
}

VoltageQuality measure_voltage(const Sweep& sweep) {
  VoltageQuality quality;
  const auto [lowest, highest] =
      std::minmax_element(sweep.voltage_mV.begin(), sweep.voltage_mV.end());
  quality.minimum_mV = *lowest;
  quality.maximum_mV = *highest;
  quality.median_subthreshold_mV = median_away_from_spikes(sweep, analysed_samples(sweep));
  const std::vector<SampleRange> clipped = clipped_runs(sweep.voltage_mV, sweep.step_ms);
  for (const SampleRange& range : analysed_samples(sweep)) {
    for (const SampleRange& run : clipped) {
      const SampleRange both{std::max(run.begin, range.begin), std::min(run.end, range.end)};
      if (both.begin >= both.end) {
        continue;
      }
      quality.clipped_samples += both.end - both.begin;
      visit_away_from_spikes(sweep, both, 2.0, 5.0, [&](std::size_t begin, std::size_t end) {
        quality.clipped_subthreshold += end - begin;
      });
    }
  }
  return quality;
}

SweepQuality measure_sweep(const Sweep& sweep, const InputQuality* known) {
  SweepQuality quality;
  quality.name = sweep.name;
  quality.use = sweep.use;
  quality.repeats = sweep.repeats;
  quality.step_ms = sweep.step_ms;
  quality.duration_ms = sweep.duration_ms();
  quality.analysed_ms = analysed_ms(sweep);
  quality.input = known != nullptr ? *known : measure_input(sweep);
  if (sweep.has_voltage()) {
    quality.voltage = measure_voltage(sweep);
  }
  quality.spike_origin = sweep.spike_origin;
  for (const Interval& interval : sweep.analysed) {
    quality.spikes += spikes_within(sweep, interval).size();
  }
  quality.rate_Hz = quality.analysed_ms > 0.0
                        ? 1e3 * static_cast<double>(quality.spikes) / quality.analysed_ms
                        : 0.0;
  const std::vector<double> intervals = spike_intervals(sweep);
  quality.interval_cv = coefficient_of_variation(intervals);
  if (!intervals.empty()) {
    quality.shortest_interval_ms = *std::min_element(intervals.begin(), intervals.end());
  }
  quality.intervals_under_2ms = static_cast<std::size_t>(
      std::count_if(intervals.begin(), intervals.end(), [](double value) { return value < 2.0; }));
  return quality;
}

std::optional<Drift> measure_rate_drift(const Recording& recording) {
  double total_ms = 0.0;
  std::size_t spikes = 0;
  for (const Sweep& sweep : recording.sweeps) {
    total_ms += analysed_ms(sweep);
    for (const Interval& interval : sweep.analysed) {
      spikes += spikes_within(sweep, interval).size();
    }
  }
  if (spikes == 0) {
    return std::nullopt;
  }
  const double target_ms = std::max({total_ms / most_blocks, shortest_block_ms,
                                     spikes_per_block * total_ms / static_cast<double>(spikes)});
  std::vector<double> minutes;
  std::vector<double> rates;
  for (const Block& block : cut_into_blocks(recording, target_ms)) {
    std::size_t count = 0;
    for (const Interval& interval : block.analysed) {
      count += spikes_within(*block.sweep, interval).size();
    }
    minutes.push_back(block.middle_min);
    rates.push_back(1e3 * static_cast<double>(count) / block.length_ms);
  }
  return drift_of(minutes, rates);
}

std::optional<Drift> measure_resting_drift(const Recording& recording) {
  double total_ms = 0.0;
  for (const Sweep& sweep : recording.sweeps) {
    total_ms += analysed_ms(sweep);
  }
  std::vector<double> minutes;
  std::vector<double> medians;
  for (const Block& block :
       cut_into_blocks(recording, std::max(total_ms / most_blocks, shortest_block_ms))) {
    if (!block.sweep->has_voltage()) {
      continue;
    }
    std::vector<SampleRange> ranges;
    for (const Interval& interval : block.analysed) {
      ranges.push_back(samples_of(*block.sweep, interval));
    }
    if (const auto middle = median_away_from_spikes(*block.sweep, ranges)) {
      minutes.push_back(block.middle_min);
      medians.push_back(*middle);
    }
  }
  return drift_of(minutes, medians);
}

}  // namespace softsill

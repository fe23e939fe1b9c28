#include "estimator/recording/statistics.hpp"

#include <algorithm>
#include <bit>
#include <boost/math/distributions/students_t.hpp>
#include <cmath>
#include <numbers>
#include <numeric>

namespace softsill {

namespace {

constexpr std::size_t longest_stretch = 65536;
constexpr std::size_t shortest_stretch = 64;
constexpr std::size_t most_stretches = 16;

/// Starts of equally long stretches spread over the pieces; pieces that are too short have none.
std::vector<std::span<const double>> choose_stretches(
    const std::vector<std::span<const double>>& pieces, std::size_t length) {
  std::vector<std::span<const double>> all;
  std::size_t total = 0;
  for (const auto& piece : pieces) {
    total += piece.size() / length;
  }
  const std::size_t wanted = std::min(total, most_stretches);
  std::size_t number = 0;
  for (const auto& piece : pieces) {
    for (std::size_t at = 0; at + length <= piece.size(); at += length, ++number) {
      // Keep number i when it is the first to reach the next of `wanted` equal shares.
      if (number * wanted / total != (number + 1) * wanted / total) {
        all.push_back(piece.subspan(at, length));
      }
    }
  }
  return all;
}

std::vector<double> shared_ranks(std::span<const double> values) {
  std::vector<std::size_t> order(values.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  std::sort(order.begin(), order.end(),
            [&](std::size_t a, std::size_t b) { return values[a] < values[b]; });
  std::vector<double> ranks(values.size());
  for (std::size_t i = 0; i < order.size();) {
    std::size_t j = i;
    while (j < order.size() && values[order[j]] == values[order[i]]) {
      ++j;
    }
    const double rank = 0.5 * static_cast<double>(i + j - 1);
    for (; i < j; ++i) {
      ranks[order[i]] = rank;
    }
  }
  return ranks;
}

/// Sum over i of (i - middle) * rank_i: the part of the correlation that permutations change.
double order_product(std::span<const double> ranks) {
  const double middle = 0.5 * static_cast<double>(ranks.size() - 1);
  double sum = 0.0;
  for (std::size_t i = 0; i < ranks.size(); ++i) {
    sum += (static_cast<double>(i) - middle) * ranks[i];
  }
  return sum;
}

}  // namespace

void fourier_transform(std::span<std::complex<double>> values) {
  const std::size_t size = values.size();
  for (std::size_t i = 1, j = 0; i < size; ++i) {
    std::size_t bit = size >> 1;
    for (; j & bit; bit >>= 1) {
      j ^= bit;
    }
    j ^= bit;
    if (i < j) {
      std::swap(values[i], values[j]);
    }
  }
  std::vector<std::complex<double>> turns(size / 2);
  for (std::size_t k = 0; k < turns.size(); ++k) {
    turns[k] = std::polar(
        1.0, -2.0 * std::numbers::pi * static_cast<double>(k) / static_cast<double>(size));
  }
  for (std::size_t length = 2; length <= size; length *= 2) {
    const std::size_t half = length / 2;
    const std::size_t stride = size / length;
    for (std::size_t from = 0; from < size; from += length) {
      for (std::size_t k = 0; k < half; ++k) {
        // Written out: std::complex multiplication checks for NaN at every step.
        const std::complex<double> turn = turns[k * stride];
        const std::complex<double> odd = values[from + half + k];
        const std::complex<double> turned(odd.real() * turn.real() - odd.imag() * turn.imag(),
                                          odd.real() * turn.imag() + odd.imag() * turn.real());
        values[from + half + k] = values[from + k] - turned;
        values[from + k] += turned;
      }
    }
  }
}

Spectrum describe_spectrum(const std::vector<std::span<const double>>& pieces, double step_ms,
                           double mean) {
  Spectrum result;
  std::size_t longest = 0;
  for (const auto& piece : pieces) {
    longest = std::max(longest, piece.size());
  }
  if (longest < shortest_stretch) {
    return result;
  }
  const std::size_t length = std::min(longest_stretch, std::bit_floor(longest));
  const auto stretches = choose_stretches(pieces, length);

  std::vector<double> power(length / 2 + 1);             // Hann-windowed
  std::vector<std::complex<double>> padded(2 * length);  // against wrapping round
  std::vector<std::complex<double>> padded_power(2 * length);
  std::vector<std::complex<double>> windowed(length);
  for (const auto& stretch : stretches) {
    std::fill(padded.begin(), padded.end(), 0.0);
    for (std::size_t i = 0; i < length; ++i) {
      const double phase =
          2.0 * std::numbers::pi * (static_cast<double>(i) + 0.5) / static_cast<double>(length);
      padded[i] = stretch[i] - mean;
      windowed[i] = (stretch[i] - mean) * 0.5 * (1.0 - std::cos(phase));
    }
    fourier_transform(padded);
    fourier_transform(windowed);
    for (std::size_t k = 0; k < padded.size(); ++k) {
      padded_power[k] += std::norm(padded[k]);
    }
    for (std::size_t k = 0; k < power.size(); ++k) {
      power[k] += std::norm(windowed[k]);
    }
  }

  // The transform of the (even) power is the autocovariance, up to a factor.
  fourier_transform(padded_power);
  const auto autocovariance = [&](std::size_t lag) {
    return padded_power[lag].real() / static_cast<double>(length - lag);
  };
  const double variance = autocovariance(0);
  if (!(variance > 0.0)) {
    return result;
  }
  double before = 1.0;
  for (std::size_t lag = 1; lag <= length / 4; ++lag) {
    const double now = autocovariance(lag) / variance;
    const double target = 1.0 / std::numbers::e;
    if (now < target) {
      result.correlation_time_ms =
          step_ms * (static_cast<double>(lag - 1) + (before - target) / (before - now));
      break;
    }
    before = now;
  }

  const double total = std::accumulate(power.begin(), power.end(), 0.0);
  const double bin_Hz = 1e3 / (step_ms * static_cast<double>(length));
  double sum = 0.0;
  for (std::size_t k = 0; k < power.size() && total > 0.0; ++k) {
    if (sum + power[k] >= 0.9 * total) {
      // Bin k gathers what lies between k - 1/2 and k + 1/2.
      const double share = (0.9 * total - sum) / power[k];
      result.bandwidth_Hz = std::max(0.0, bin_Hz * (static_cast<double>(k) - 0.5 + share));
      break;
    }
    sum += power[k];
  }
  return result;
}

double order_correlation_p(std::span<const double> values) {
  const std::size_t count = values.size();
  if (count < 3 || std::all_of(values.begin(), values.end(),
                               [&](double value) { return value == values.front(); })) {
    return 1.0;
  }
  std::vector<double> ranks = shared_ranks(values);
  const double observed = std::abs(order_product(ranks));
  if (count <= 9) {
    // next_permutation visits each distinct arrangement once; tied ones are equally likely.
    std::sort(ranks.begin(), ranks.end());
    std::size_t all = 0;
    std::size_t extreme = 0;
    do {
      ++all;
      extreme += std::abs(order_product(ranks)) >= observed - 1e-9 ? 1 : 0;
    } while (std::next_permutation(ranks.begin(), ranks.end()));
    return static_cast<double>(extreme) / static_cast<double>(all);
  }
  const double n = static_cast<double>(count);
  double rank_spread = 0.0;
  for (const double rank : ranks) {
    rank_spread += (rank - 0.5 * (n - 1.0)) * (rank - 0.5 * (n - 1.0));
  }
  const double correlation = observed / std::sqrt(rank_spread * n * (n * n - 1.0) / 12.0);
  if (correlation >= 1.0 - 1e-12) {
    return 0.0;
  }
  const double t = correlation * std::sqrt((n - 2.0) / (1.0 - correlation * correlation));
  return 2.0 * boost::math::cdf(boost::math::complement(boost::math::students_t(n - 2.0), t));
}

double least_squares_slope(std::span<const double> x, std::span<const double> y) {
  const double n = static_cast<double>(x.size());
  const double mean_x = std::accumulate(x.begin(), x.end(), 0.0) / n;
  const double mean_y = std::accumulate(y.begin(), y.end(), 0.0) / n;
  double xy = 0.0;
  double xx = 0.0;
  for (std::size_t i = 0; i < x.size(); ++i) {
    xy += (x[i] - mean_x) * (y[i] - mean_y);
    xx += (x[i] - mean_x) * (x[i] - mean_x);
  }
  return xx > 0.0 ? xy / xx : 0.0;
}

double median(std::vector<double>& values) {
  const auto middle = values.begin() + static_cast<std::ptrdiff_t>((values.size() - 1) / 2);
  std::nth_element(values.begin(), middle, values.end());
  return *middle;
}

std::vector<SampleRange> clipped_runs(std::span<const double> values, double step_ms) {
  constexpr std::size_t fewest_samples = 3;
  constexpr std::size_t fewest_occasions = 3;
  constexpr std::size_t pile_up = 3;
  constexpr double apart_ms = 5.0;  // closer runs are one occasion
  std::vector<SampleRange> found;
  if (values.empty()) {
    return found;
  }
  const auto [lowest, highest] = std::minmax_element(values.begin(), values.end());
  if (*lowest == *highest) {
    return found;
  }
  for (const double extreme : {*lowest, *highest}) {
    const double other = extreme == *lowest ? *highest : *lowest;
    double next = other;  // the value nearest to the extreme
    std::size_t at_extreme = 0;
    std::size_t at_next = 0;
    std::vector<SampleRange> runs;
    std::size_t occasions = 0;
    for (std::size_t i = 0; i < values.size();) {
      if (values[i] != extreme) {
        if (std::abs(values[i] - extreme) < std::abs(next - extreme)) {
          next = values[i];
          at_next = 0;
        }
        at_next += values[i] == next ? 1 : 0;
        ++i;
        continue;
      }
      const std::size_t begin = i;
      while (i < values.size() && values[i] == extreme) {
        ++i;
      }
      at_extreme += i - begin;
      if (i - begin >= fewest_samples) {
        const bool apart =
            runs.empty() || static_cast<double>(begin - runs.back().end) * step_ms > apart_ms;
        occasions += apart ? 1 : 0;
        runs.push_back({begin, i});
      }
    }
    if (occasions >= fewest_occasions && at_extreme >= pile_up * at_next) {
      found.insert(found.end(), runs.begin(), runs.end());
    }
  }
  return found;
}

}  // namespace softsill

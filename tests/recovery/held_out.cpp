#include "tests/recovery/held_out.hpp"

#include <algorithm>
#include <cmath>
#include <limits>

#include "softsill/random.hpp"

namespace softsill::test {
namespace {

/// (kappa * I) at the sample times, by the midpoint rule over each held sample.
std::vector<double> filtered_at_samples(const Kernel& kappa, const Sweep& sweep,
                                        double before_value) {
  const double h = sweep.step_ms;
  const auto taps = static_cast<std::size_t>(std::ceil(kappa.basis.support_ms / h));
  std::vector<double> weight(taps), tail(taps + 1, 0.0);
  for (std::size_t k = taps; k-- > 0;) {
    weight[k] = h * kappa.value((static_cast<double>(k) + 0.5) * h);
    tail[k] = tail[k + 1] + weight[k];
  }
  std::vector<double> out(sweep.input.size() + 1, 0.0);
  for (std::size_t i = 0; i < out.size(); ++i) {
    const std::size_t seen = std::min(i, taps);
    double sum = before_value * tail[seen];
    for (std::size_t k = 0; k < seen; ++k) {
      sum += weight[k] * sweep.input[i - 1 - k];
    }
    out[i] = sum;
  }
  return out;
}

}  // namespace

BlockScores score_blocks(const Model& model, const Sweep& sweep, double before_value,
                         const Interval& window, std::size_t blocks) {
  const std::vector<double> filtered = model.kappa.present()
                                           ? filtered_at_samples(model.kappa, sweep, before_value)
                                           : std::vector<double>(sweep.input.size() + 1, 0.0);
  const double memory_ms = std::max(model.eta.basis.support_ms, model.theta_1.basis.support_ms);
  auto log_hazard = [&](double time_ms) {
    const double place = (time_ms - sweep.start_ms) / sweep.step_ms;
    const auto i = std::min(static_cast<std::size_t>(place), sweep.input.size() - 1);
    const double share = place - static_cast<double>(i);
    double x = model.resting_potential - model.threshold + (1.0 - share) * filtered[i] +
               share * filtered[i + 1];
    const auto past =
        std::lower_bound(sweep.spikes_ms.begin(), sweep.spikes_ms.end(), time_ms - memory_ms);
    for (auto spike = past; spike != sweep.spikes_ms.end() && *spike < time_ms; ++spike) {
      const double lag = time_ms - *spike;
      x += (model.eta.present() ? model.eta.value(lag) : 0.0) -
           (model.theta_1.present() ? model.theta_1.value(lag) : 0.0);
    }
    return escape_log_rate(model.escape, x / model.noise_level);
  };
  BlockScores out;
  out.model.assign(blocks, 0.0);
  out.spikes.assign(blocks, 0.0);
  auto block_of = [&](double time_ms) {
    const double place = (time_ms - window.begin_ms) / window.length_ms();
    return std::min(static_cast<std::size_t>(place * static_cast<double>(blocks)), blocks - 1);
  };
  // Stretches at risk, in pieces of at most half a sample.
  auto integrate = [&](double from, double to) {
    if (to <= from) {
      return;
    }
    const auto pieces = static_cast<std::size_t>(std::ceil((to - from) / (0.5 * sweep.step_ms)));
    const double h = (to - from) / static_cast<double>(pieces);
    for (std::size_t i = 0; i < pieces; ++i) {
      const double middle = from + (static_cast<double>(i) + 0.5) * h;
      out.model[block_of(middle)] -= h * std::exp(log_hazard(middle));
    }
  };
  double from = window.begin_ms;
  for (double spike : sweep.spikes_ms) {
    if (spike >= window.end_ms) {
      break;
    }
    if (spike >= window.begin_ms) {
      integrate(from, spike);
      // A spike inside the model's refractory time is one that the model says cannot be.
      out.model[block_of(spike)] +=
          spike < from ? -std::numeric_limits<double>::infinity() : log_hazard(spike);
      out.spikes[block_of(spike)] += 1.0;
    }
    from = std::max(from, spike + model.refractory_ms);
  }
  integrate(from, window.end_ms);
  double total = 0.0;
  for (double spikes : out.spikes) {
    total += spikes;
  }
  const double rate = total / window.length_ms();
  for (double spikes : out.spikes) {
    out.constant.push_back(spikes * std::log(rate) -
                           rate * window.length_ms() / static_cast<double>(blocks));
  }
  return out;
}

BitsPerSpike bits_per_spike(const BlockScores& scores, std::uint64_t seed, int resamples,
                            double level) {
  const std::size_t n = scores.model.size();
  RandomStream random(seed, 0);
  auto over = [&](auto pick) {
    double gain = 0.0, spikes = 0.0;
    for (std::size_t i = 0; i < n; ++i) {
      const std::size_t block = pick(i);
      gain += scores.model[block] - scores.constant[block];
      spikes += scores.spikes[block];
    }
    return gain / spikes / std::log(2.0);
  };
  std::vector<double> samples;
  for (int i = 0; i < resamples; ++i) {
    samples.push_back(over([&](std::size_t) { return random.below(n); }));
  }
  std::sort(samples.begin(), samples.end());
  auto quantile = [&](double p) {
    return samples[static_cast<std::size_t>(p * static_cast<double>(resamples - 1))];
  };
  return {over([](std::size_t i) { return i; }), quantile(0.5 - 0.5 * level),
          quantile(0.5 + 0.5 * level)};
}

}  // namespace softsill::test

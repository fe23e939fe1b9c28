#include <algorithm>
#include <array>
#include <cmath>

#include "estimator/model/exponential_responses.hpp"
#include "softsill/error.hpp"

namespace softsill {
namespace {

using Moments = std::array<double, 3>;

/// Moments after a pause of `lag` without new input: (s + lag)^r expanded, times exp(-lag / tau).
Moments decayed(const Moments& now, double lag, double tau) {
  const double fall = std::exp(-lag / tau);
  return {fall * now[0], fall * (now[1] + lag * now[0]),
          fall * (now[2] + lag * (2.0 * now[1] + lag * now[0]))};
}

/// exp(-60) of anything earlier is below the rounding of what follows, even times s^2.
constexpr double forgotten = 60.0;
/// Shares of a sample below which a time counts as lying on the grid.
constexpr double on_grid = 1e-7;

/// integral_0^lag s^r exp(-s / tau) ds.
Moments window(double lag, double tau) {
  const double u = lag / tau;
  if (u < 1e-2) {
    // Power series: the closed forms below lose digits to cancellation here.
    Moments sum{};
    double term = lag;
    for (int n = 0; n < 8; ++n) {
      sum[0] += term / (n + 1);
      sum[1] += term * lag / (n + 2);
      sum[2] += term * lag * lag / (n + 3);
      term *= -u / (n + 1);
    }
    return sum;
  }
  const double fall = std::exp(-u);
  const double zero = -tau * std::expm1(-u);
  const double one = tau * zero - tau * lag * fall;
  return {zero, one, 2.0 * tau * one - tau * lag * lag * fall};
}

/// One held sample further.
struct Step {
  double length, fall;
  Moments fresh;
  Step(double step_ms, double tau_ms)
      : length(step_ms), fall(std::exp(-step_ms / tau_ms)), fresh(window(step_ms, tau_ms)) {}
  void advance(Moments& state, double input) const {
    state[2] = fall * (state[2] + length * (2.0 * state[1] + length * state[0])) + fresh[2] * input;
    state[1] = fall * (state[1] + length * state[0]) + fresh[1] * input;
    state[0] = fall * state[0] + fresh[0] * input;
  }
};

Moments held_forever(double value, double tau_ms) {
  return {value * tau_ms, value * tau_ms * tau_ms, value * 2.0 * tau_ms * tau_ms * tau_ms};
}

}  // namespace

ExponentialCheckpoints input_exponential_checkpoints(double tau_ms, std::span<const double> input,
                                                     double step_ms, double before_value,
                                                     std::size_t every) {
  ExponentialCheckpoints out;
  out.every = every;
  const Step step(step_ms, tau_ms);
  Moments state = held_forever(before_value, tau_ms);
  for (std::size_t sample = 0; sample < input.size(); ++sample) {
    if (sample % every == 0) {
      out.states.push_back(state);
    }
    step.advance(state, input[sample]);
  }
  return out;
}

void input_exponential_moments(double tau_ms, int orders, std::span<const double> input,
                               double start_ms, double step_ms, double before_value,
                               std::span<const double> times_ms, std::span<double> out,
                               const ExponentialCheckpoints* checkpoints) {
  const Step step(step_ms, tau_ms);
  Moments state = held_forever(before_value, tau_ms);
  std::size_t sample = 0;
  if (checkpoints != nullptr && !times_ms.empty() && !checkpoints->states.empty()) {
    const double first = std::max(0.0, (times_ms.front() - start_ms) / step_ms);
    const std::size_t at = std::min(static_cast<std::size_t>(first) / checkpoints->every,
                                    checkpoints->states.size() - 1);
    state = checkpoints->states[at];
    sample = at * checkpoints->every;
  }
  for (std::size_t i = 0; i < times_ms.size(); ++i) {
    // A time on the grid, up to rounding, is the start of its sample.
    const double position = (times_ms[i] - start_ms) / step_ms + on_grid;
    const auto target = static_cast<std::size_t>(
        std::clamp(std::floor(position), 0.0, static_cast<double>(input.size())));
    if (target < sample) {
      throw InternalError("input_exponential_moments: times are not sorted");
    }
    if (orders == 1) {
      for (; sample < target; ++sample) {
        state[0] = step.fall * state[0] + step.fresh[0] * input[sample];
      }
    } else {
      for (; sample < target; ++sample) {
        step.advance(state, input[sample]);
      }
    }
    const double rest = times_ms[i] - (start_ms + step_ms * static_cast<double>(sample));
    Moments now = state;
    if (rest > 2.0 * on_grid * step_ms && sample < input.size()) {
      now = decayed(state, rest, tau_ms);
      const Moments fresh = window(rest, tau_ms);
      for (int r = 0; r < 3; ++r) {
        now[r] += input[sample] * fresh[r];
      }
    }
    std::copy_n(now.begin(), orders, out.begin() + static_cast<std::ptrdiff_t>(i) * orders);
  }
}

void history_exponential_moments(double tau_ms, int orders, std::span<const double> spikes_ms,
                                 std::span<const double> times_ms, std::span<double> out) {
  Moments state{};
  if (times_ms.empty()) {
    return;
  }
  auto spike =
      std::lower_bound(spikes_ms.begin(), spikes_ms.end(), times_ms.front() - forgotten * tau_ms);
  double at = times_ms.front();
  for (std::size_t i = 0; i < times_ms.size(); ++i) {
    for (; spike != spikes_ms.end() && *spike < times_ms[i]; ++spike) {
      if (state[0] > 0.0) {
        state = decayed(state, *spike - at, tau_ms);
      }
      state[0] += 1.0;
      at = *spike;
    }
    const Moments now = state[0] > 0.0 ? decayed(state, times_ms[i] - at, tau_ms) : Moments{};
    std::copy_n(now.begin(), orders, out.begin() + static_cast<std::ptrdiff_t>(i) * orders);
  }
}

}  // namespace softsill

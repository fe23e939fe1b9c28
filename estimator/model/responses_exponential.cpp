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

}  // namespace

void input_exponential_moments(double tau_ms, int orders, std::span<const double> input,
                               double start_ms, double step_ms, double before_value,
                               std::span<const double> times_ms, std::span<double> out) {
  const Moments full = {tau_ms, tau_ms * tau_ms, 2.0 * tau_ms * tau_ms * tau_ms};
  const Moments step = window(step_ms, tau_ms);
  const double fall = std::exp(-step_ms / tau_ms);
  Moments state{};
  for (int r = 0; r < 3; ++r) {
    state[r] = before_value * full[r];
  }
  std::size_t sample = 0;
  for (std::size_t i = 0; i < times_ms.size(); ++i) {
    const double position = (times_ms[i] - start_ms) / step_ms;
    const auto target = static_cast<std::size_t>(
        std::clamp(std::floor(position), 0.0, static_cast<double>(input.size())));
    if (target < sample) {
      throw InternalError("input_exponential_moments: times are not sorted");
    }
    if (orders == 1) {
      for (; sample < target; ++sample) {
        state[0] = fall * state[0] + step[0] * input[sample];
      }
    } else {
      for (; sample < target; ++sample) {
        state[2] = fall * (state[2] + step_ms * (2.0 * state[1] + step_ms * state[0])) +
                   step[2] * input[sample];
        state[1] = fall * (state[1] + step_ms * state[0]) + step[1] * input[sample];
        state[0] = fall * state[0] + step[0] * input[sample];
      }
    }
    const double rest = times_ms[i] - (start_ms + step_ms * static_cast<double>(sample));
    Moments now = state;
    if (rest > 0.0 && sample < input.size()) {
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
  double at = 0.0;
  std::size_t spike = 0;
  for (std::size_t i = 0; i < times_ms.size(); ++i) {
    for (; spike < spikes_ms.size() && spikes_ms[spike] < times_ms[i]; ++spike) {
      state = decayed(state, spike == 0 ? 0.0 : spikes_ms[spike] - at, tau_ms);
      state[0] += 1.0;
      at = spikes_ms[spike];
    }
    const Moments now = spike == 0 ? Moments{} : decayed(state, times_ms[i] - at, tau_ms);
    std::copy_n(now.begin(), orders, out.begin() + static_cast<std::ptrdiff_t>(i) * orders);
  }
}

}  // namespace softsill

#pragma once

/// \file exponential_responses.hpp
/// Exact recursions for kernels s^r exp(-s / tau), r = 0, 1, 2: the exponential and what its
/// derivatives by log tau are made of.

#include <array>
#include <cstddef>
#include <span>
#include <vector>

namespace softsill {

/// The three moments at every `every`-th sample of an input.
struct ExponentialCheckpoints {
  std::size_t every = 0;
  std::vector<std::array<double, 3>> states;
};
ExponentialCheckpoints input_exponential_checkpoints(double tau_ms, std::span<const double> input,
                                                     double step_ms, double before_value,
                                                     std::size_t every);

/// out[i * orders + r] = integral_0^inf s^r exp(-s / tau) I(t_i - s) ds at sorted times, for a
/// sample-and-hold input held at `before_value` before its first sample. orders is 1, 2 or 3.
///
/// A call for a late stretch starts from the last checkpoint before it, if there are any, so that
/// many calls on one sweep do not walk through the whole recording each.
void input_exponential_moments(double tau_ms, int orders, std::span<const double> input,
                               double start_ms, double step_ms, double before_value,
                               std::span<const double> times_ms, std::span<double> out,
                               const ExponentialCheckpoints* checkpoints = nullptr);

/// out[i * orders + r] = sum over t_f < t_i of (t_i - t_f)^r exp(-(t_i - t_f) / tau).
void history_exponential_moments(double tau_ms, int orders, std::span<const double> spikes_ms,
                                 std::span<const double> times_ms, std::span<double> out);

}  // namespace softsill

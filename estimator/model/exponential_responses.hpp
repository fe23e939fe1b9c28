#pragma once

/// \file exponential_responses.hpp
/// Exact recursions for kernels s^r exp(-s / tau), r = 0, 1, 2: the exponential and what its
/// derivatives by log tau are made of.

#include <span>

namespace softsill {

/// out[i * orders + r] = integral_0^inf s^r exp(-s / tau) I(t_i - s) ds at sorted times, for a
/// sample-and-hold input held at `before_value` before its first sample. orders is 1, 2 or 3.
void input_exponential_moments(double tau_ms, int orders, std::span<const double> input,
                               double start_ms, double step_ms, double before_value,
                               std::span<const double> times_ms, std::span<double> out);

/// out[i * orders + r] = sum over t_f < t_i of (t_i - t_f)^r exp(-(t_i - t_f) / tau).
void history_exponential_moments(double tau_ms, int orders, std::span<const double> spikes_ms,
                                 std::span<const double> times_ms, std::span<double> out);

}  // namespace softsill

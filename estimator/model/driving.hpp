#pragma once

/// \file driving.hpp
/// What an input does to the potential at the middle of every step of a simulation.

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <vector>

#include "softsill/kernel.hpp"
#include "softsill/simulation.hpp"

namespace softsill {

/// The grid of steps over an input; the last step may stick out past the end.
struct StepGrid {
  double start_ms, end_ms, step_ms;
  std::size_t steps;

  StepGrid(const DrivingInput& driving, double step)
      : start_ms(driving.start_ms), end_ms(driving.end_ms()), step_ms(step) {
    // An input of 0.3 ms holds three steps of 0.1 ms, whatever the last bits say.
    const double exact = static_cast<double>(driving.input.size()) * driving.step_ms / step;
    steps = std::max<std::size_t>(1, static_cast<std::size_t>(std::ceil(exact - 1e-6)));
  }
  double middle(std::size_t i) const {
    return std::min(start_ms + (static_cast<double>(i) + 0.5) * step_ms, end_ms);
  }
};

/// Lag beyond which a kernel no longer reaches: where exponentials have fallen to exp(-40).
double reach_of(const Kernel& kernel);

/// (kappa * I) at the middles of steps begin .. end - 1, from that stretch of input alone.
std::vector<double> input_effect(const Kernel& kappa, const DrivingInput& driving,
                                 const StepGrid& grid, std::size_t begin, std::size_t end);

}  // namespace softsill

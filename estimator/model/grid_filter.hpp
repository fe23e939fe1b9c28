#pragma once

/// \file grid_filter.hpp
/// kappa * I at evenly spaced times that fall at the same place inside their samples: several times
/// faster there than the responses at arbitrary times, and exact to rounding.

#include <cstddef>
#include <span>
#include <vector>

#include "softsill/kernel.hpp"

namespace softsill {

/// Where the wanted times lie, counted in samples from the start of the input: time i is
/// first + i * stride + part, with 0 <= part < 1.
struct SampleGrid {
  std::size_t first = 0, stride = 1, count = 0;
  double part = 0.0;
};

/// (kernel * I) at the times of the grid, I held at `before` earlier than its first sample.
/// Exponentials by recursion; kernels that end by overlap-save with fast Fourier transforms
/// (Stockham 1966). \throws InternalError when the grid leaves the input
std::vector<double> filter_on_grid(const Kernel& kernel, std::span<const double> input,
                                   double step_ms, double before, const SampleGrid& grid);

}  // namespace softsill

#include "estimator/model/driving.hpp"

#include <span>

#include "estimator/model/grid_filter.hpp"

namespace softsill {
namespace {

/// Nearest whole number when `ratio` is one to a billionth, else 0.
std::size_t whole(double ratio) {
  const double nearest = std::round(ratio);
  return nearest >= 1.0 && std::abs(ratio / nearest - 1.0) < 1e-9
             ? static_cast<std::size_t>(nearest)
             : 0;
}

/// (kappa * I) at the middles of steps begin .. end - 1 of a grid with `stride` samples a step.
/// The last middles may lie past the input; they are left out.
std::vector<double> effect_on_grid(const Kernel& kappa, std::span<const double> input,
                                   double sample_ms, double before, std::size_t stride,
                                   std::size_t begin, std::size_t end) {
  const std::size_t first = begin * stride + stride / 2;
  const auto lead = static_cast<std::size_t>(reach_of(kappa) / sample_ms) + 2;
  const std::size_t from = first > lead ? first - lead : 0;
  const std::size_t left = input.size() > first ? (input.size() - first - 1) / stride + 1 : 0;
  SampleGrid grid;
  grid.first = first - from;
  grid.stride = stride;
  grid.count = std::min(end - begin, left);
  grid.part = stride % 2 == 1 ? 0.5 : 0.0;
  if (grid.count == 0) {
    return {};
  }
  const std::size_t to = first + (grid.count - 1) * stride + 1;
  return filter_on_grid(kappa, input.subspan(from, to - from), sample_ms,
                        from == 0 ? before : input[from - 1], grid);
}

}  // namespace

double reach_of(const Kernel& kernel) {
  return kernel.basis.family == KernelFamily::exponentials ? kernel.basis.support_ms * 40.0 / 7.0
                                                           : kernel.basis.support_ms;
}

std::vector<double> input_effect(const Kernel& kappa, const DrivingInput& driving,
                                 const StepGrid& grid, std::size_t begin, std::size_t end) {
  if (!kappa.present()) {
    return std::vector<double>(end - begin, 0.0);
  }
  std::vector<double> effect;
  if (const std::size_t stride = whole(grid.step_ms / driving.step_ms); stride > 0) {
    effect =
        effect_on_grid(kappa, driving.input, driving.step_ms, driving.before, stride, begin, end);
  } else if (const std::size_t copies = whole(driving.step_ms / grid.step_ms); copies > 0) {
    // Every sample repeated is the same input on the grid's own step.
    const auto lead = static_cast<std::size_t>(reach_of(kappa) / grid.step_ms) + 2;
    const std::size_t from = begin > lead ? (begin - lead) / copies : 0;
    std::vector<double> repeated;
    for (std::size_t i = from * copies; i < end && i / copies < driving.input.size(); ++i) {
      repeated.push_back(driving.input[i / copies]);
    }
    effect = effect_on_grid(kappa, repeated, grid.step_ms,
                            from == 0 ? driving.before : driving.input[from - 1], 1,
                            begin - from * copies, end - from * copies);
  }
  std::vector<double> times;
  for (std::size_t i = begin + effect.size(); i < end; ++i) {
    times.push_back(grid.middle(i));
  }
  if (times.empty()) {
    return effect;
  }
  const auto samples = static_cast<double>(driving.input.size());
  const auto sample = [&](double t_ms) {
    return static_cast<std::size_t>(
        std::clamp((t_ms - driving.start_ms) / driving.step_ms, 0.0, samples));
  };
  const std::size_t from = sample(times.front() - reach_of(kappa) - driving.step_ms);
  const std::size_t to = std::min(driving.input.size(), sample(times.back() + driving.step_ms) + 1);
  const double before = from == 0 ? driving.before : driving.input[from - 1];
  const std::vector<double> rest =
      filtered_input(kappa, driving.input.subspan(from, to - from),
                     driving.start_ms + static_cast<double>(from) * driving.step_ms,
                     driving.step_ms, before, times);
  effect.insert(effect.end(), rest.begin(), rest.end());
  return effect;
}

}  // namespace softsill

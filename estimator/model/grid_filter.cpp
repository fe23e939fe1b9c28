#include "estimator/model/grid_filter.hpp"

#include <algorithm>
#include <cmath>
#include <complex>
#include <unsupported/Eigen/FFT>

#include "softsill/error.hpp"

namespace softsill {
namespace {

/// With w_l the integral of A exp(-s / tau) over the l-th sample back, w_{l+1} = decay w_l, so the
/// sum over samples 1, 2, ... back obeys a recursion.
void add_exponential(double amplitude, double tau_ms, std::span<const double> input, double step_ms,
                     double before, const SampleGrid& grid, std::vector<double>& out) {
  const double decay = std::exp(-step_ms / tau_ms);
  const double part = grid.part * step_ms;
  const double here = -amplitude * tau_ms * std::expm1(-part / tau_ms);
  const double older = amplitude * tau_ms * std::exp(-part / tau_ms);
  const double last = -older * std::expm1(-step_ms / tau_ms);
  double sum = before * older;
  std::size_t sample = 0;
  for (std::size_t i = 0; i < grid.count; ++i) {
    const std::size_t at = grid.first + i * grid.stride;
    for (; sample < at; ++sample) {
      sum = decay * sum + last * input[sample];
    }
    out[i] += sum + here * input[at];
  }
}

/// Integral of the kernel over [begin, end), exact for cubics between knots.
double integral_over(const Kernel& kernel, double begin, double end, std::vector<double>& buffer) {
  static const double node = std::sqrt(0.6);
  const double nodes[3] = {-node, 0.0, node}, weights[3] = {5.0 / 18, 8.0 / 18, 5.0 / 18};
  const std::vector<double>& knots = kernel.basis.knots_ms;
  double total = 0.0;
  auto knot = std::upper_bound(knots.begin(), knots.end(), begin);
  while (begin < end) {
    const double cut = knot != knots.end() ? std::min(end, *knot++) : end;
    for (int g = 0; g < 3 && cut > begin; ++g) {
      kernel.basis.values(0.5 * (begin + cut) + 0.5 * (cut - begin) * nodes[g], buffer);
      for (std::size_t k = 0; k < buffer.size(); ++k) {
        total += (cut - begin) * weights[g] * kernel.coefficients[k] * buffer[k];
      }
    }
    begin = std::max(begin, cut);
  }
  return total;
}

/// Weights of the samples 0, 1, 2, ... back.
std::vector<double> sample_weights(const Kernel& kernel, double step_ms, double part) {
  std::vector<double> weights, buffer(kernel.basis.size());
  const double support = kernel.basis.support_ms;
  weights.push_back(integral_over(kernel, 0.0, part * step_ms, buffer));
  for (double begin = part * step_ms; begin < support;
       begin = (part + static_cast<double>(weights.size()) - 1.0) * step_ms) {
    weights.push_back(integral_over(kernel, begin, begin + step_ms, buffer));
  }
  return weights;
}

void add_ending(const Kernel& kernel, std::span<const double> input, double step_ms, double before,
                const SampleGrid& grid, std::vector<double>& out) {
  const std::vector<double> weights = sample_weights(kernel, step_ms, grid.part);
  const std::size_t past = weights.size() - 1;
  std::size_t size = 4096;
  while (size < 4 * weights.size()) {
    size *= 2;
  }
  const std::size_t fresh = size - past;  // outputs of one transform that are not wrapped round
  Eigen::FFT<double> transform;
  transform.SetFlag(Eigen::FFT<double>::HalfSpectrum);
  std::vector<double> stretch(size, 0.0);
  std::copy(weights.begin(), weights.end(), stretch.begin());
  std::vector<std::complex<double>> filter, spectrum;
  transform.fwd(filter, stretch);
  const std::size_t end = grid.first + (grid.count - 1) * grid.stride + 1;
  std::size_t i = 0;
  // A stretch begins `past` samples before its first output.
  for (std::size_t begin = grid.first; begin < end; begin += fresh) {
    for (std::size_t k = 0; k < size; ++k) {
      const std::size_t shifted = begin + k;
      stretch[k] = shifted < past                  ? before
                   : shifted - past < input.size() ? input[shifted - past]
                                                   : 0.0;
    }
    transform.fwd(spectrum, stretch);
    for (std::size_t k = 0; k < spectrum.size(); ++k) {
      spectrum[k] *= filter[k];
    }
    transform.inv(stretch, spectrum, static_cast<Eigen::Index>(size));
    for (; i < grid.count && grid.first + i * grid.stride < begin + fresh; ++i) {
      out[i] += stretch[past + grid.first + i * grid.stride - begin];
    }
  }
}

}  // namespace

std::vector<double> filter_on_grid(const Kernel& kernel, std::span<const double> input,
                                   double step_ms, double before, const SampleGrid& grid) {
  std::vector<double> out(grid.count, 0.0);
  if (grid.count == 0 || !kernel.present()) {
    return out;
  }
  if (grid.first + (grid.count - 1) * grid.stride >= input.size()) {
    throw InternalError("filter_on_grid: the grid leaves the input");
  }
  if (kernel.basis.family == KernelFamily::exponentials) {
    for (std::size_t k = 0; k < kernel.basis.size(); ++k) {
      add_exponential(kernel.coefficients[k], kernel.basis.time_constants_ms[k], input, step_ms,
                      before, grid, out);
    }
  } else {
    add_ending(kernel, input, step_ms, before, grid, out);
  }
  return out;
}

}  // namespace softsill

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <vector>

#include "estimator/model/exponential_responses.hpp"
#include "estimator/model/piecewise.hpp"
#include "softsill/error.hpp"
#include "softsill/kernel.hpp"

namespace softsill {
namespace {

/// Functions whose reaches lie within a factor of this share one set of running integrals: local
/// time then stays within a few reaches, and the truncated powers cancel without losing digits.
constexpr double level_ratio = 4.0;
constexpr double shortest_chunk_ms = 16.0;

/// What is wanted from one level: rows of basis responses, or their sum with coefficients.
struct Level {
  double reach_ms = 0.0;
  std::vector<std::size_t> functions;
  std::size_t first_knot = 0, end_knot = 0;  ///< range of TruncatedPowers::knots in use
};

std::vector<Level> levels_of(const TruncatedPowers& powers) {
  std::vector<Level> levels;
  double limit = 0.0;
  // Functions come ordered by reach.
  for (std::size_t k = 0; k < powers.functions.size(); ++k) {
    const TruncatedPowers::Function& function = powers.functions[k];
    if (levels.empty() || function.reach_ms > limit) {
      levels.push_back({});
      levels.back().first_knot = function.first_knot;
      limit = function.reach_ms * level_ratio;
    }
    levels.back().functions.push_back(k);
    levels.back().reach_ms = function.reach_ms;
    levels.back().end_knot = function.first_knot + function.weights.size();
  }
  return levels;
}

/// Running integrals J_1 .. J_{degree+1} of the input from the origin of a chunk:
/// J_m(t) = integral_origin^t (t - s)^(m-1) / (m-1)! I(s) ds, sampled on the input's own grid.
template <int Degree>
class RunningIntegrals {
 public:
  RunningIntegrals(std::span<const double> input, double start_ms, double step_ms, double baseline)
      : input_(input),
        start_ms_(start_ms),
        step_ms_(step_ms),
        per_step_(1.0 / step_ms),
        baseline_(baseline) {}

  /// Covers [begin_ms, end_ms]; earlier input counts as `baseline`, which is subtracted throughout.
  void restart(double begin_ms, double end_ms) {
    const auto n = static_cast<std::ptrdiff_t>(input_.size());
    first_ = static_cast<std::ptrdiff_t>(std::floor((begin_ms - start_ms_) / step_ms_));
    first_ = std::clamp<std::ptrdiff_t>(first_, 0, n);
    auto last = static_cast<std::ptrdiff_t>(std::floor((end_ms - start_ms_) / step_ms_)) + 1;
    last = std::clamp(last, first_, n);
    const auto count = static_cast<std::size_t>(last - first_) + 1;
    if (rows_.size() < count) {
      rows_.resize(count);
    }
    count_ = count;
    std::array<double, Degree + 1> integral{};
    const Fractions fractions = fractions_of(step_ms_);
    for (std::size_t i = 0; i < count; ++i) {
      const auto sample = static_cast<std::size_t>(first_) + i;
      const double value = sample < input_.size() ? input_[sample] - baseline_ : 0.0;
      Row& row = rows_[i];
      row[0] = value;
      for (int m = 0; m <= Degree; ++m) {
        row[static_cast<std::size_t>(m) + 1] = integral[static_cast<std::size_t>(m)];
      }
      integral = advanced(row, fractions);
    }
  }

  /// degree! J_{degree+1}(t), 0 before the first sample.
  double top(double t_ms) const {
    const auto [row, rest] = locate(t_ms);
    if (row == nullptr) {
      return 0.0;
    }
    // J_{D+1}(t + h) = J_{D+1} + h (J_D + h/2 (J_{D-1} + ... + h/(D+1) I)).
    double sum = (*row)[0];
    for (std::size_t i = 0; i <= Degree; ++i) {
      sum = (*row)[i + 1] + rest * inverse[Degree + 1 - i] * sum;
    }
    return factorial[Degree] * sum;
  }

  /// r! J_{r+1}(t) for r = 0 .. Degree.
  std::array<double, Degree + 1> all(double t_ms) const {
    std::array<double, Degree + 1> out{};
    const auto [row, rest] = locate(t_ms);
    if (row == nullptr) {
      return out;
    }
    out = advanced(*row, fractions_of(rest));
    for (std::size_t r = 1; r <= Degree; ++r) {
      out[r] *= factorial[r];
    }
    return out;
  }

 private:
  /// The held sample, then J_1 .. J_{Degree+1} at the sample's start.
  using Row = std::array<double, Degree + 2>;

  static constexpr std::array<double, 5> inverse = {0.0, 1.0, 1.0 / 2, 1.0 / 3, 1.0 / 4};
  static constexpr std::array<double, 4> factorial = {1.0, 1.0, 2.0, 6.0};

  /// h, h/2, h/3, ...: divisions would dominate the loops.
  using Fractions = std::array<double, Degree + 2>;
  static Fractions fractions_of(double h) {
    Fractions out{};
    for (std::size_t k = 1; k < out.size(); ++k) {
      out[k] = h * inverse[k];
    }
    return out;
  }

  /// J_1 .. J_{Degree+1} a time h after the row's start, input held (Horner).
  static std::array<double, Degree + 1> advanced(const Row& row, const Fractions& h) {
    std::array<double, Degree + 1> out{};
    for (std::size_t m = 0; m <= Degree; ++m) {
      double sum = row[0];
      for (std::size_t i = 0; i <= m; ++i) {
        sum = row[i + 1] + h[m + 1 - i] * sum;
      }
      out[m] = sum;
    }
    return out;
  }

  std::pair<const Row*, double> locate(double t_ms) const {
    const double position = (t_ms - start_ms_) * per_step_;
    if (position <= 0.0) {
      return {nullptr, 0.0};
    }
    auto sample = static_cast<std::ptrdiff_t>(position) - first_;
    sample = std::clamp<std::ptrdiff_t>(sample, 0, static_cast<std::ptrdiff_t>(count_) - 1);
    const double rest = t_ms - (start_ms_ + step_ms_ * static_cast<double>(first_ + sample));
    return {&rows_[static_cast<std::size_t>(sample)], rest};
  }

  std::span<const double> input_;
  double start_ms_, step_ms_, per_step_, baseline_;
  std::ptrdiff_t first_ = 0;
  std::size_t count_ = 0;
  std::vector<Row> rows_;
};

/// Calls store(i, level, knot_values, at_zero) for every time of every level.
template <int Degree, typename Store>
void sweep_levels(const TruncatedPowers& powers, std::span<const double> input, double start_ms,
                  double step_ms, double baseline, std::span<const double> times_ms,
                  Store&& store) {
  RunningIntegrals<Degree> integrals(input, start_ms, step_ms, baseline);
  std::vector<double> at_knots(powers.knots.size());
  for (const Level& level : levels_of(powers)) {
    const double chunk_ms = std::max(shortest_chunk_ms, 2.0 * level.reach_ms);
    double chunk_end = -std::numeric_limits<double>::infinity();
    double previous = chunk_end;
    for (std::size_t i = 0; i < times_ms.size(); ++i) {
      const double t = times_ms[i];
      if (t < previous) {
        throw InternalError("input_responses: times are not sorted");
      }
      previous = t;
      if (t > chunk_end) {
        chunk_end = t + chunk_ms;
        integrals.restart(t - level.reach_ms - step_ms, chunk_end);
      }
      for (std::size_t j = level.first_knot; j < level.end_knot; ++j) {
        at_knots[j] = integrals.top(t - powers.knots[j]);
      }
      store(i, level, at_knots, integrals.all(t));
    }
  }
}

template <int Degree>
void spline_responses(const Basis& basis, std::span<const double> input, double start_ms,
                      double step_ms, double before_value, std::span<const double> times_ms,
                      std::span<double> out) {
  const TruncatedPowers powers(basis);
  const std::size_t width = basis.size();
  const std::vector<double> offset = basis.integrals();
  sweep_levels<Degree>(powers, input, start_ms, step_ms, before_value, times_ms,
                       [&](std::size_t i, const Level& level, const std::vector<double>& at_knots,
                           const std::array<double, Degree + 1>& at_zero) {
                         double* row = out.data() + i * width;
                         for (std::size_t k : level.functions) {
                           const TruncatedPowers::Function& function = powers.functions[k];
                           double sum = before_value * offset[k];
                           for (std::size_t j = 0; j < function.weights.size(); ++j) {
                             sum += function.weights[j] * at_knots[function.first_knot + j];
                           }
                           for (std::size_t r = 0; r <= Degree; ++r) {
                             sum += function.at_zero[r] * at_zero[r];
                           }
                           row[k] = sum;
                         }
                       });
}

template <int Degree>
std::vector<double> spline_filtered(const Kernel& kernel, std::span<const double> input,
                                    double start_ms, double step_ms, double before_value,
                                    std::span<const double> times_ms) {
  const TruncatedPowers powers(kernel.basis);
  std::vector<double> sum(times_ms.size(), before_value * kernel.integral());
  std::vector<double> knot_weight(powers.knots.size());
  const Level* current = nullptr;
  std::array<double, Degree + 1> zero_weight{};
  sweep_levels<Degree>(powers, input, start_ms, step_ms, before_value, times_ms,
                       [&](std::size_t i, const Level& level, const std::vector<double>& at_knots,
                           const std::array<double, Degree + 1>& at_zero) {
                         if (i == 0 || current != &level) {
                           // One set of weights per level: coefficients folded into the truncated
                           // powers.
                           current = &level;
                           std::fill(knot_weight.begin(), knot_weight.end(), 0.0);
                           zero_weight = {};
                           for (std::size_t k : level.functions) {
                             const TruncatedPowers::Function& function = powers.functions[k];
                             for (std::size_t j = 0; j < function.weights.size(); ++j) {
                               knot_weight[function.first_knot + j] +=
                                   kernel.coefficients[k] * function.weights[j];
                             }
                             for (std::size_t r = 0; r <= Degree; ++r) {
                               zero_weight[r] += kernel.coefficients[k] * function.at_zero[r];
                             }
                           }
                         }
                         double part = 0.0;
                         for (std::size_t j = level.first_knot; j < level.end_knot; ++j) {
                           part += knot_weight[j] * at_knots[j];
                         }
                         for (std::size_t r = 0; r <= Degree; ++r) {
                           part += zero_weight[r] * at_zero[r];
                         }
                         sum[i] += part;
                       });
  return sum;
}

}  // namespace

void input_responses(const Basis& basis, std::span<const double> input, double start_ms,
                     double step_ms, double before_value, std::span<const double> times_ms,
                     std::span<double> out) {
  const std::size_t width = basis.size();
  if (out.size() != times_ms.size() * width) {
    throw InternalError("input_responses: output has the wrong size");
  }
  switch (basis.family) {
    case KernelFamily::absent:
      return;
    case KernelFamily::spline:
      spline_responses<3>(basis, input, start_ms, step_ms, before_value, times_ms, out);
      return;
    case KernelFamily::steps:
      spline_responses<0>(basis, input, start_ms, step_ms, before_value, times_ms, out);
      return;
    case KernelFamily::exponentials: {
      std::vector<double> column(times_ms.size());
      for (std::size_t k = 0; k < width; ++k) {
        input_exponential_moments(basis.time_constants_ms[k], 1, input, start_ms, step_ms,
                                  before_value, times_ms, column);
        for (std::size_t i = 0; i < column.size(); ++i) {
          out[i * width + k] = column[i];
        }
      }
    }
  }
}

std::vector<double> filtered_input(const Kernel& kernel, std::span<const double> input,
                                   double start_ms, double step_ms, double before_value,
                                   std::span<const double> times_ms) {
  switch (kernel.basis.family) {
    case KernelFamily::spline:
      return spline_filtered<3>(kernel, input, start_ms, step_ms, before_value, times_ms);
    case KernelFamily::steps:
      return spline_filtered<0>(kernel, input, start_ms, step_ms, before_value, times_ms);
    case KernelFamily::absent:
    case KernelFamily::exponentials:
      break;
  }
  std::vector<double> sum(times_ms.size(), 0.0), column(times_ms.size());
  for (std::size_t k = 0; k < kernel.basis.size(); ++k) {
    input_exponential_moments(kernel.basis.time_constants_ms[k], 1, input, start_ms, step_ms,
                              before_value, times_ms, column);
    for (std::size_t i = 0; i < column.size(); ++i) {
      sum[i] += kernel.coefficients[k] * column[i];
    }
  }
  return sum;
}

void history_responses(const Basis& basis, std::span<const double> spikes_ms,
                       std::span<const double> times_ms, std::span<double> out) {
  const std::size_t width = basis.size();
  if (out.size() != times_ms.size() * width) {
    throw InternalError("history_responses: output has the wrong size");
  }
  std::fill(out.begin(), out.end(), 0.0);
  if (basis.family == KernelFamily::absent) {
    return;
  }
  if (basis.family == KernelFamily::exponentials) {
    std::vector<double> column(times_ms.size());
    for (std::size_t k = 0; k < width; ++k) {
      history_exponential_moments(basis.time_constants_ms[k], 1, spikes_ms, times_ms, column);
      for (std::size_t i = 0; i < column.size(); ++i) {
        out[i * width + k] = column[i];
      }
    }
    return;
  }
  const PolynomialPieces pieces(basis);
  std::size_t oldest = 0, newest = 0;
  for (std::size_t i = 0; i < times_ms.size(); ++i) {
    const double t = times_ms[i];
    while (newest < spikes_ms.size() && spikes_ms[newest] < t) {
      ++newest;
    }
    while (oldest < newest && t - spikes_ms[oldest] >= pieces.support()) {
      ++oldest;
    }
    double* row = out.data() + i * width;
    for (std::size_t f = oldest; f < newest; ++f) {
      const double lag = t - spikes_ms[f];
      if (lag < pieces.begin()) {
        break;
      }
      const PolynomialPieces::Cell& cell = pieces.at(lag);
      const double s = lag - cell.begin;
      for (int r = 0; r < cell.count; ++r) {
        const std::array<double, 4>& c = cell.coefficients[static_cast<std::size_t>(r)];
        row[cell.first + static_cast<std::size_t>(r)] += c[0] + s * (c[1] + s * (c[2] + s * c[3]));
      }
    }
  }
}

}  // namespace softsill

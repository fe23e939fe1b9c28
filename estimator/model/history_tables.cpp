#include "estimator/model/history_tables.hpp"

#include <algorithm>
#include <cmath>

#include "estimator/model/steady_exp.hpp"

namespace softsill {
namespace {

constexpr std::size_t largest_table = std::size_t{1} << 22;  // entries, 32 MB
constexpr std::size_t within_cells = 64;

/// Sum of the kernels at a lag.
class Sum {
 public:
  explicit Sum(const std::vector<ScaledKernel>& kernels) : kernels_(kernels) {}

  double operator()(double lag_ms) {
    double sum = 0.0;
    for (const ScaledKernel& part : kernels_) {
      buffer_.resize(part.kernel.basis.size());
      part.kernel.basis.values(lag_ms, buffer_);
      double value = 0.0;
      for (std::size_t k = 0; k < buffer_.size(); ++k) {
        value += part.kernel.coefficients[k] * buffer_[k];
      }
      sum += part.scale * value;
    }
    return sum;
  }

 private:
  const std::vector<ScaledKernel>& kernels_;
  std::vector<double> buffer_;
};

}  // namespace

HistoryTables::HistoryTables(const std::vector<ScaledKernel>& kernels, double step_ms) {
  std::vector<ScaledKernel> ending;
  double reach = 0.0;
  for (const ScaledKernel& part : kernels) {
    if (part.kernel.basis.family == KernelFamily::exponentials) {
      for (std::size_t j = 0; j < part.kernel.basis.size(); ++j) {
        const double amplitude = part.scale * part.kernel.coefficients[j];
        const double tau = part.kernel.basis.time_constants_ms[j];
        const auto same = std::find_if(exponentials_.begin(), exponentials_.end(),
                                       [tau](const Exponential& e) { return e.tau_ms == tau; });
        if (same != exponentials_.end()) {
          same->amplitude += amplitude;
        } else {
          exponentials_.push_back({amplitude, tau, std::exp(-step_ms * run / tau)});
        }
      }
    } else if (part.kernel.present()) {
      ending.push_back(part);
      reach = std::max(reach, part.kernel.basis.support_ms);
    }
  }
  Sum all(kernels), lasting(ending);
  if (!ending.empty()) {
    length_ = static_cast<std::size_t>(std::ceil(reach / step_ms)) + 2;
    while (phases_ > 1 && phases_ * length_ > largest_table) {
      phases_ /= 2;
    }
  }
  lasting_.assign(phases_ * length_, 0.0);
  soon_.assign(phases_ * run, 0.0);
  const bool alike = exponentials_.empty();
  for (std::size_t p = 0; p < phases_; ++p) {
    const double phase = (static_cast<double>(p) + 0.5) / static_cast<double>(phases_);
    for (std::size_t k = 1; k < length_; ++k) {
      lasting_[p * length_ + k] = lasting((static_cast<double>(k) + 0.5 - phase) * step_ms);
    }
    for (std::size_t k = 1; k < run; ++k) {
      soon_[p * run + k] = alike ? (k < length_ ? lasting_[p * length_ + k] : 0.0)
                                 : all((static_cast<double>(k) + 0.5 - phase) * step_ms);
    }
  }
  for (std::size_t i = 0; i < within_cells; ++i) {
    within_.push_back(all((static_cast<double>(i) + 0.5) / within_cells * step_ms));
  }
}

double HistoryTables::within_step(double lag_in_steps) const {
  const auto cell = static_cast<std::size_t>(std::max(0.0, lag_in_steps) * within_cells);
  return within_[std::min(cell, within_cells - 1)];
}

void HistoryTables::to_factors() {
  // Factors stay within e^+-69 so that a few overlapping spikes neither overflow nor vanish.
  const auto factor = [](double x) { return steady_exp(std::clamp(x, -69.0, 69.0)); };
  for (std::vector<double>* table : {&lasting_, &soon_, &within_}) {
    std::transform(table->begin(), table->end(), table->begin(), factor);
  }
}

}  // namespace softsill

#pragma once

/// \file history_tables.hpp
/// What a spike does to the distance to threshold x in the steps that follow it, tabulated once per
/// model and step so that a spike costs one pass over its table.

#include <cstddef>
#include <span>
#include <vector>

#include "softsill/kernel.hpp"

namespace softsill {

/// A signed share of a kernel in x: scale * kernel(lag).
struct ScaledKernel {
  Kernel kernel;
  double scale = 1.0;
};

/// Steps are counted from the one in which the spike fell; a spike at a share `phase` of its step
/// meets the middle of the k-th step after it at the lag (k + 1/2 - phase) step.
class HistoryTables {
 public:
  /// Steps after which exponential kernels are carried by their states instead of the table.
  static constexpr std::size_t run = 64;

  HistoryTables(const std::vector<ScaledKernel>& kernels, double step_ms);

  /// Effect on steps k = 1 .. length() - 1 of kernels that end (splines, steps), entry 0 unused.
  std::span<const double> lasting(double phase) const { return row(lasting_, length_, phase); }
  /// Effect of all kernels on steps k = 1 .. run - 1, entry 0 unused.
  std::span<const double> soon(double phase) const { return row(soon_, run, phase); }
  std::size_t length() const { return length_; }

  /// Exponential terms amplitude * exp(-lag / tau), equal time constants joined.
  struct Exponential {
    double amplitude, tau_ms;
    double decay_per_run;  ///< over `run` steps
  };
  std::span<const Exponential> exponentials() const { return exponentials_; }

  /// sum of all kernels at a lag below one step, by nearest entry of a table of 1/64 steps.
  double within_step(double lag_in_steps) const;

  /// Replaces every entry by exp(entry), for hazards that are products.
  void to_factors();

 private:
  std::span<const double> row(const std::vector<double>& table, std::size_t length,
                              double phase) const {
    const auto p = static_cast<std::size_t>(phase * static_cast<double>(phases_));
    return {table.data() + (p < phases_ ? p : phases_ - 1) * length, length};
  }

  std::size_t phases_ = 16;
  std::size_t length_ = 1;
  std::vector<double> lasting_, soon_, within_;
  std::vector<Exponential> exponentials_;
};

}  // namespace softsill

#pragma once

/// \file kernel.hpp
/// Kernels and their bases: kappa (input filter), eta (spike-afterpotential), theta_1 (moving
/// threshold), each a linear combination of basis functions of the lag s >= 0 in ms.

#include <cstddef>
#include <memory>
#include <span>
#include <string>
#include <string_view>
#include <vector>

namespace softsill {

/// How a kernel is built. `absent` kernels are identically 0.
enum class KernelFamily { absent, spline, exponentials, steps };

std::string_view to_string(KernelFamily family);
/// \throws Error naming the nearest known word.
KernelFamily kernel_family_from(const std::string& word);

/// A basis on lags [0, support).
///
/// `spline`: cubic B-splines of the lag whose knots are evenly spaced in log(1 + s / first_ms), the
/// last functions left out so that the kernel reaches 0 smoothly at the support's end.
/// `steps`: indicator functions between the given edges (B-splines of degree 0).
/// `exponentials`: exp(-s / tau_j), cut nowhere: `support_ms` then is where the slowest has fallen
/// to exp(-7), used for lead-ins only.
struct Basis {
  KernelFamily family = KernelFamily::absent;
  double support_ms = 0.0;
  int degree = 3;                         ///< of the B-splines (spline 3, steps 0)
  std::vector<double> knots_ms;           ///< size() + degree + 1 knots (spline, steps)
  std::vector<double> time_constants_ms;  ///< exponentials

  /// Number of basis functions; 0 for an absent kernel.
  std::size_t size() const;
  /// Values of all basis functions at one lag; out.size() == size(). 0 for negative lags.
  void values(double lag_ms, std::span<double> out) const;
  /// Integral of each basis function over lags [0, infinity), ms.
  std::vector<double> integrals() const;

  static Basis absent();
  /// \param count number of basis functions, >= 4
  /// \throws Error on a non-positive support, first_ms or a count under 4
  static Basis spline(double support_ms, double first_ms, int count);
  /// \throws Error on fewer than two edges, unsorted edges or a first edge below 0
  static Basis steps(std::vector<double> edges_ms);
  /// \throws Error on an empty list or a time constant that is not positive and finite
  static Basis exponentials(std::vector<double> time_constants_ms);
};

/// A kernel with its coefficients: value(s) = sum_j coefficients[j] * basis_j(s).
struct Kernel {
  Basis basis;
  std::vector<double> coefficients;

  bool present() const { return basis.family != KernelFamily::absent; }
  double value(double lag_ms) const;
  /// Integral over all lags; for kappa in mV/(nA ms) this is the input resistance in MOhm.
  double integral() const;
};

/// What the input was before the first sample.
enum class Before { first_value, zero, holding };

/// Exact responses of basis functions to a sample-and-hold input:
/// (basis_k * I)(t) = integral_0^inf basis_k(s) I(t - s) ds, with I held at `before_value` earlier
/// than the first sample.
///
/// Cost per time: O(size * degree), independent of the sampling rate and of the support, by running
/// integrals of the input restarted often enough to lose no digits (B-splines are sums of truncated
/// powers: de Boor 1978, A Practical Guide to Splines, ch. IX), or by exact exponential recursions.
///
/// \param times_ms sorted, inside [start_ms, start_ms + input.size() * step_ms]
/// \param out row-major, times_ms.size() x basis.size()
/// \throws InternalError when times are unsorted or outside
void input_responses(const Basis& basis, std::span<const double> input, double start_ms,
                     double step_ms, double before_value, std::span<const double> times_ms,
                     std::span<double> out);

/// (kappa * I)(t) at sorted times, as above, for a kernel with coefficients.
std::vector<double> filtered_input(const Kernel& kernel, std::span<const double> input,
                                   double start_ms, double step_ms, double before_value,
                                   std::span<const double> times_ms);

/// Summed basis functions over past spikes: out(i, k) = sum over t_f < times[i] of
/// basis_k(times[i] - t_f). A spike at exactly times[i] does not count.
/// \param times_ms sorted; \param spikes_ms sorted; \param out row-major as above
void history_responses(const Basis& basis, std::span<const double> spikes_ms,
                       std::span<const double> times_ms, std::span<double> out);

}  // namespace softsill

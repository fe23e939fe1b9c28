#pragma once

/// \file coordinates.hpp
/// The fitted coordinates: an unconstrained vector theta, and how it becomes the linear
/// coefficients of the spike predictor (beta) and of the potential (v), with exact derivatives.
///
/// Spikes and voltage (mV, b = 1 / Delta, reference potential subtracted from E_0 and theta_0):
///   x = b (E_0 + kappa * I + sum eta) - theta_0 / Delta - sum theta_1 / Delta
///   V = E_0 + kappa * I + sum eta + R_s I
/// so theta = (E_0, kappa, eta, b, theta_0 / Delta, theta_1 / Delta, R_s, log sigma, atanh
/// rho). Spikes alone: theta = beta = ((E_0 - theta_0) / Delta, kappa / Delta, (eta - theta_1) /
/// Delta). Then the escape function's own (log lambda_0, log n) and one coordinate per free time
/// constant.

#include <string>
#include <vector>

#include "estimator/fit/columns.hpp"
#include "softsill/escape.hpp"
#include "softsill/variant.hpp"

namespace softsill {

/// A kernel's share of theta and of the columns.
struct KernelPart {
  enum class Scale { times_b, minus_one, one };
  std::string name;  ///< "kappa", "eta", "theta_1", "eta_minus_theta_1"
  KernelPlan plan;
  Basis basis;               ///< with the current time constants
  std::size_t first = 0;     ///< of its coefficients in theta
  Scale scale = Scale::one;  ///< how coefficients enter the spike predictor
  int spike_block = -1, voltage_block = -1;
  std::vector<std::ptrdiff_t> tau_index;  ///< coordinate of each time constant, -1: fixed
  std::size_t size() const { return basis.size(); }
  bool penalised() const { return basis.family == KernelFamily::spline; }
};

/// theta mapped to what the likelihoods take.
struct Mapped {
  Vector beta;           ///< spike columns
  Matrix beta_jacobian;  ///< (spike columns + 2) x theta; last rows: log lambda_0, log n
  Escape escape;
  Vector v;           ///< voltage columns
  Matrix v_jacobian;  ///< (voltage columns + 2) x theta; last rows: log sigma, atanh rho
  double log_sigma = 0.0, atanh_rho = 0.0;
};

class Coordinates {
 public:
  /// \param fit_series_resistance adds R_s as a coordinate (joint only)
  Coordinates(const Variant& variant, bool joint, bool fit_series_resistance);

  std::size_t size() const { return names_.size(); }
  bool joint() const { return joint_; }
  const std::vector<std::string>& names() const { return names_; }
  const std::vector<KernelPart>& parts() const { return parts_; }
  const KernelPart* part(const std::string& name) const;
  /// First of a part's columns; voltage_column only for parts that the potential carries.
  Eigen::Index spike_column(const KernelPart& part) const;
  Eigen::Index voltage_column(const KernelPart& part) const;
  const Columns& spike_columns() const { return spike_columns_; }
  const Columns& voltage_columns() const { return voltage_columns_; }
  /// Index of a named coordinate, -1 when not fitted.
  std::ptrdiff_t index(const std::string& name) const;
  std::size_t free_time_constants() const { return tau_ranges_.size(); }
  /// Longest reach of any kernel: the lead-in.
  double support_ms() const;

  Mapped map(const Vector& theta) const;
  /// hessian += sum_i weight_i d2 beta_i + the same for v: second-order part of the chain rule.
  void add_curvature(const Vector& theta, const Vector& beta_weight, const Vector& v_weight,
                     Matrix& hessian) const;
  /// Takes over theta's time constants; true when any changed, so that columns must be refilled.
  bool take_time_constants(const Vector& theta);

  /// Time constant at a coordinate value, and its inverse. The coordinate is a logit between the
  /// plan's bounds on the log scale, so that no bound has to be handed to the optimiser.
  double time_constant(std::size_t coordinate, double value) const;
  double coordinate_of(std::size_t coordinate, double time_constant_ms) const;
  /// d log(time constant) / d coordinate.
  double log_slope(std::size_t coordinate, double value) const;
  bool at_edge(std::size_t coordinate, double value) const;
  bool is_time_constant(std::size_t coordinate) const;

  /// Starting values of everything that is not linear (time constants, own parameters).
  Vector neutral_start() const;

 private:
  struct TauRange {
    std::size_t coordinate;
    double shortest, longest, start;
  };
  const TauRange& range_of(std::size_t coordinate) const;
  void add_part(const std::string& name, const KernelPlan& plan, KernelPart::Scale scale,
                bool in_voltage, bool share_history);
  std::size_t add_name(const std::string& name);

  Variant variant_;
  bool joint_;
  std::vector<std::string> names_;
  std::vector<KernelPart> parts_;
  std::vector<TauRange> tau_ranges_;
  Columns spike_columns_, voltage_columns_;
};

/// The after-spike kernel that spikes alone can see: eta - theta_1 on one basis.
KernelPlan merged_history_plan(const Variant& variant);
/// Basis of a plan at its starting time constants. Absent plans give an absent basis.
Basis basis_of(const KernelPlan& plan);

}  // namespace softsill

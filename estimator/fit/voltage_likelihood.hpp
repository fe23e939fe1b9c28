#pragma once

/// \file voltage_likelihood.hpp
/// Log-likelihood of the subthreshold potential V(t) = row . v + eps(t) with stationary AR(1)
/// noise: eps_t = rho eps_{t-1} + sqrt(1 - rho^2) sigma xi_t at the step the potential is read at.
///
/// Reading every k-th sample of an AR(1) process is again AR(1), so a coarser step loses a little
/// information and no correctness.

#include <vector>

#include "estimator/fit/columns.hpp"
#include "estimator/fit/exposure.hpp"
#include "softsill/variant.hpp"

namespace softsill {

/// Sufficient statistics of z = (row, V - reference) for every sigma, rho and v, per time block.
///
/// With m and d the mean and the difference of two neighbours,
///   (e_t - rho e_{t-1})^2 = (1-rho)^2 m^2 + (1+rho)^2/4 d^2 + (1-rho^2) m d,
/// and m d telescopes to half the difference of e^2 between the ends of a run, so that three
/// symmetric matrices hold everything: one pass over the data, none per iteration.
struct VoltageStatistics {
  struct Block {
    Matrix mean;        ///< sum of m m^T over neighbouring pairs
    Matrix difference;  ///< sum of d d^T
    Matrix ends;        ///< first samples of segments plus half of (last - first) of every run
    double pairs = 0.0, samples = 0.0;
  };
  std::vector<Block> blocks;
  Block total;
  double reference_mV = 0.0;  ///< subtracted from V
  double step_ms = 0.0;
  double used_ms = 0.0;  ///< time the samples stand for
};

/// Which samples are read: all sweeps' analysed windows after the lead-in, every
/// variant.voltage_step_ms, outside the masks around spikes.
/// Time blocks are block_ms long and start anew with every sweep.
VoltageStatistics gather_voltage(const Columns& columns, const Exposure& exposure,
                                 const Recording& recording, const Variant& variant,
                                 double lead_in_ms, double block_ms, int threads);

/// Value and derivatives by (v, log sigma, atanh rho).
struct VoltageEvaluation {
  double log_likelihood = 0.0;
  Vector gradient;
  Matrix information;  ///< observed
  Matrix expected;     ///< without the mean-noise cross terms, positive definite
};

VoltageEvaluation evaluate_voltage(const VoltageStatistics& statistics, const Vector& v,
                                   double log_sigma, double atanh_rho);

/// Score of each block by (v, log sigma, atanh rho).
Matrix block_scores(const VoltageStatistics& statistics, const Vector& v, double log_sigma,
                    double atanh_rho);

/// Best v, log sigma, atanh rho of the potential alone with a quadratic penalty on v.
struct VoltageFit {
  Vector v;
  double log_sigma = 0.0, atanh_rho = 0.0;
  Matrix information;  ///< by v, with the penalty
};
/// Columns of derivatives by time constants have no coefficient of their own: holds them at 0.
void hold_derivative_columns(const Columns& columns, const VoltageStatistics& statistics,
                             Matrix& penalty);
VoltageFit fit_voltage(const VoltageStatistics& statistics, const Matrix& penalty);

}  // namespace softsill

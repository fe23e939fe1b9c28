#include <Eigen/Eigenvalues>
#include <boost/math/distributions/chi_squared.hpp>
#include <cmath>
#include <cstdio>

#include "estimator/fit/fit_steps.hpp"
#include "estimator/fit/smoothing.hpp"

namespace softsill {
namespace {

/// An objective seen through theta = map * phi.
class LinearView : public Objective {
 public:
  LinearView(Objective& inner, Matrix map) : inner_(inner), map_(std::move(map)) {}
  Eigen::Index size() const override { return map_.cols(); }
  Evaluated evaluate(const Vector& phi, Want want) override {
    Evaluated out = inner_.evaluate(map_ * phi, want);
    if (want != Want::value && std::isfinite(out.value)) {
      out.gradient = Vector(map_.transpose() * out.gradient);
      out.hessian = Matrix(map_.transpose() * out.hessian * map_);
      if (want == Want::derivatives_and_expected) {
        out.expected = Matrix(map_.transpose() * out.expected * map_);
      }
    }
    return out;
  }

 private:
  Objective& inner_;
  Matrix map_;
};

/// Kappa of the potential alone, with the joint fit's smoothing of what the potential carries.
struct ByVoltage {
  Vector kappa;
  Matrix covariance;
};

ByVoltage kappa_by_voltage(const CellFit& fit) {
  const Coordinates& coordinates = fit.coordinates();
  const VoltageStatistics& statistics = fit.likelihood->voltage();
  const auto width = static_cast<Eigen::Index>(coordinates.voltage_columns().width);
  Matrix penalty = Matrix::Zero(width, width);
  for (const KernelPart& part : coordinates.parts()) {
    if (part.voltage_block < 0) {
      continue;
    }
    const Eigen::Index first = coordinates.voltage_column(part);
    const auto n = static_cast<Eigen::Index>(part.size());
    for (const Penalty& each : fit.penalised->penalties()) {
      if (each.first == part.first && each.matrix.rows() == n) {
        penalty.block(first, first, n, n) = each.lambda * each.matrix;
      }
    }
  }
  hold_derivative_columns(coordinates.voltage_columns(), statistics, penalty);
  const VoltageFit voltage = fit_voltage(statistics, penalty);
  const KernelPart& kappa = *coordinates.part("kappa");
  const auto n = static_cast<Eigen::Index>(kappa.size());
  const Eigen::Index first = coordinates.voltage_column(kappa);
  const Matrix covariance = inverse_information(voltage.information, {});
  return {voltage.v.segment(first, n), covariance.block(first, first, n, n)};
}

/// The same variant for spikes alone, at the joint fit's time constants and own parameters.
Variant frozen_variant(const CellFit& fit) {
  Variant frozen = *fit.variant;
  frozen.escape = fit.coordinates().map(fit.minimum.theta).escape;
  frozen.fit_lambda_0 = frozen.fit_exponent = false;
  for (KernelPlan* plan : {&frozen.kappa, &frozen.eta, &frozen.theta_1}) {
    const char* name = plan == &frozen.kappa ? "kappa" : plan == &frozen.eta ? "eta" : "theta_1";
    const KernelPart* part = fit.coordinates().part(name);
    if (part != nullptr && plan->family == KernelFamily::exponentials) {
      plan->time_constants_ms = part->basis.time_constants_ms;
      plan->count = static_cast<int>(part->size());
      plan->fit_time_constants = false;
      plan->with_membrane = false;
    }
  }
  return frozen;
}

KernelCurve curve_of(const std::string& name, const CellFit& fit, const Basis& basis,
                     const Vector& coefficients, const Matrix& covariance,
                     const std::vector<double>& lags, double z) {
  KernelCurve curve;
  curve.kernel = name;
  curve.unit = Reading(fit).kappa_unit();
  curve.lag_ms = lags;
  std::vector<double> at(basis.size());
  for (double lag : lags) {
    basis.values(lag, at);
    const Eigen::Map<const Vector> phi(at.data(), coefficients.size());
    const double value = phi.dot(coefficients);
    const double error = std::sqrt(std::max(0.0, phi.dot(covariance * phi)));
    curve.value.push_back(value);
    curve.low.push_back(value - z * error);
    curve.high.push_back(value + z * error);
  }
  return curve;
}

std::string sentence_for(const KappaConsistency& test) {
  char text[256];
  std::snprintf(text, sizeof text,
                test.p_value < 0.01
                    ? "kappa seen by the voltage and kappa seen by the spikes differ in shape "
                      "(statistic %.1f on %.0f degrees of freedom, p = %.2g): the model class, not "
                      "only the noise, is a limit here"
                    : "kappa seen by the voltage and kappa seen by the spikes agree in shape "
                      "(statistic %.1f on %.0f degrees of freedom, p = %.2g)",
                test.statistic, test.degrees_of_freedom, test.p_value);
  return text;
}

}  // namespace

void check_kappa(CellFit& fit, Estimate& estimate) {
  const KernelPart* kappa = fit.coordinates().part("kappa");
  if (kappa == nullptr || kappa->size() < 2) {
    estimate.kappa_consistency.sentence =
        kappa == nullptr ? "this variant has no kappa to compare"
                         : "a kappa of one exponential has one free shape: nothing to compare";
    return;
  }
  const ByVoltage voltage = kappa_by_voltage(fit);
  Coordinates alone(frozen_variant(fit), false, false);
  const int threads = fit.likelihood->threads();
  // A shared after-spike basis gives the joint fit the very columns that spikes alone have.
  const bool same =
      alone.spike_columns().width == fit.coordinates().spike_columns().width &&
      fit.coordinates().free_time_constants() == 0 &&
      fit.coordinates().spike_columns().blocks.size() == alone.spike_columns().blocks.size();
  CellObjective spikes =
      same ? CellObjective(std::move(alone), fit.likelihood->plan(), fit.likelihood->design(),
                           threads)
           : CellObjective(std::move(alone), fit.likelihood->plan(), VoltageStatistics{}, threads);
  const KernelPart& k = *spikes.coordinates().part("kappa");
  const auto first = static_cast<Eigen::Index>(k.first);
  const auto n = static_cast<Eigen::Index>(k.size());
  const Eigen::Index p = spikes.size();

  // Smoothing of the spikes' own kernels, kappa free: also the curve to show.
  const double b = fit.minimum.theta[fit.coordinates().index("b")];
  Vector start = Vector::Zero(p);
  const Mapped joint = fit.coordinates().map(fit.minimum.theta);
  if (joint.beta.size() == p) {
    start = joint.beta;  // same columns: after-spike kernels included
  }
  start[0] = joint.beta[0];
  start.segment(first, n) = b * voltage.kappa;
  const Matrix information = spikes.evaluate(start, Want::derivatives_and_expected).expected;
  std::vector<Penalty> penalties = penalties_for(spikes.coordinates(), information);
  take_pilot_smoothing(fit.pilot_penalties, 1.0, penalties);
  Penalised penalised(spikes, penalties);
  SmoothingOptions options;
  options.minimizer = fit.minimizer_options();
  options.minimizer.fixed.clear();
  // The curve and the test need a sensible smoothing, not the last digit of it.
  options.gradient = 0.3;
  options.exact = false;
  const Smoothed free = choose_smoothing(penalised, start, options);
  if (!free.minimum.passed()) {
    estimate.kappa_consistency.sentence = "the spikes alone do not determine kappa well enough";
    return;
  }

  // Null: kappa / Delta = b kappa_V with b free; other kernels penalised as chosen, kappa not.
  std::erase_if(penalised.penalties(), [](const Penalty& each) { return each.name == "kappa"; });
  Matrix map = Matrix::Zero(p, p - n + 1);
  for (Eigen::Index i = 0, column = 0; i < p; ++i) {
    if (i < first || i >= first + n) {
      map(i, column++) = 1.0;
    } else if (i == first) {
      map.col(column++).segment(first, n) = voltage.kappa;
    }
  }
  LinearView null(penalised, map);
  // Everything but kappa starts where the free fit ended; kappa where the joint fit has it.
  Vector phi = map.transpose() * free.minimum.theta;
  phi[first] = b;
  const Minimum at_null = minimize(null, phi, options.minimizer);
  if (!at_null.passed()) {
    estimate.kappa_consistency.sentence = "the fit with kappa's shape given by the voltage failed";
    return;
  }
  const Vector theta = map * at_null.theta;
  const double b_null = at_null.theta[first];
  const Evaluated here = penalised.evaluate(theta, Want::derivatives);
  // Score of kappa with the nuisances profiled out, and its variance with kappa_V's own added.
  const Matrix nuisance = map.transpose() * here.hessian * map;
  const Matrix cross = here.hessian.middleRows(first, n) * map;
  const Matrix effective =
      here.hessian.block(first, first, n, n) - cross * nuisance.ldlt().solve(cross.transpose());
  const Vector score = -here.gradient.segment(first, n);
  const Matrix variance = effective + b_null * b_null * effective * voltage.covariance * effective;
  const Vector scale = variance.diagonal().cwiseMax(1e-300).cwiseSqrt().cwiseInverse();
  const Eigen::SelfAdjointEigenSolver<Matrix> eigen(scale.asDiagonal() * variance *
                                                    scale.asDiagonal());
  const Vector rotated = eigen.eigenvectors().transpose() * (scale.asDiagonal() * score);
  KappaConsistency& test = estimate.kappa_consistency;
  const double smallest = 1e-7 * eigen.eigenvalues().maxCoeff();
  for (Eigen::Index i = 0; i < n; ++i) {
    if (eigen.eigenvalues()[i] > smallest) {
      test.statistic += rotated[i] * rotated[i] / eigen.eigenvalues()[i];
      test.degrees_of_freedom += 1.0;
    }
  }
  // One direction, kappa_V itself, is spent on b.
  test.degrees_of_freedom = std::min(test.degrees_of_freedom, static_cast<double>(n - 1));
  test.tested = true;
  test.p_value = boost::math::cdf(
      boost::math::complement(boost::math::chi_squared(test.degrees_of_freedom), test.statistic));
  test.sentence = sentence_for(test);

  const double z = normal_quantile_for(fit.options->level);
  std::vector<double> lags;
  for (const KernelCurve& curve : estimate.kernels) {
    if (curve.kernel == "kappa") {
      lags = curve.lag_ms;
    }
  }
  estimate.kernels.push_back(
      curve_of("kappa_by_voltage", fit, kappa->basis, voltage.kappa, voltage.covariance, lags, z));
  const Matrix covariance = inverse_information(free.minimum.hessian, {});
  estimate.kernels.push_back(
      curve_of("kappa_by_spikes", fit, k.basis, free.minimum.theta.segment(first, n) / b_null,
               covariance.block(first, first, n, n) / (b_null * b_null), lags, z));
}

}  // namespace softsill

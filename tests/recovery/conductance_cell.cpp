#include "tests/recovery/conductance_cell.hpp"

#include <cmath>

namespace softsill::test {
namespace {

// Parameters and rates as in the paper (from memory): C = 1 uF/cm^2, phi = 5.
constexpr double g_sodium = 35.0, g_potassium = 9.0, g_leak = 0.1;      // mS/cm^2
constexpr double e_sodium = 55.0, e_potassium = -90.0, e_leak = -65.0;  // mV
constexpr double phi = 5.0;

/// x / (1 - exp(-x)), continued through 0.
double linear_over_exponential(double x) { return std::abs(x) < 1e-6 ? 1.0 : x / -std::expm1(-x); }

struct State {
  double v, h, n;
};

double alpha_h(double v) { return 0.07 * std::exp(-(v + 58.0) / 20.0); }
double beta_h(double v) { return 1.0 / (1.0 + std::exp(-0.1 * (v + 28.0))); }
double alpha_n(double v) { return 0.1 * linear_over_exponential(0.1 * (v + 34.0)); }
double beta_n(double v) { return 0.125 * std::exp(-(v + 44.0) / 80.0); }
/// Sodium activation follows at once.
double m_infinity(double v) {
  const double alpha = linear_over_exponential(0.1 * (v + 35.0));
  const double beta = 4.0 * std::exp(-(v + 60.0) / 18.0);
  return alpha / (alpha + beta);
}

State slope(const State& s, double current) {
  const double m = m_infinity(s.v);
  const double sodium = g_sodium * m * m * m * s.h * (s.v - e_sodium);
  const double potassium = g_potassium * s.n * s.n * s.n * s.n * (s.v - e_potassium);
  return {current - sodium - potassium - g_leak * (s.v - e_leak),
          phi * (alpha_h(s.v) * (1.0 - s.h) - beta_h(s.v) * s.h),
          phi * (alpha_n(s.v) * (1.0 - s.n) - beta_n(s.v) * s.n)};
}

State moved(const State& s, const State& k, double h) {
  return {s.v + h * k.v, s.h + h * k.h, s.n + h * k.n};
}

State runge_kutta(const State& s, double current, double h) {
  const State a = slope(s, current);
  const State b = slope(moved(s, a, 0.5 * h), current);
  const State c = slope(moved(s, b, 0.5 * h), current);
  const State d = slope(moved(s, c, h), current);
  return {s.v + h / 6.0 * (a.v + 2.0 * b.v + 2.0 * c.v + d.v),
          s.h + h / 6.0 * (a.h + 2.0 * b.h + 2.0 * c.h + d.h),
          s.n + h / 6.0 * (a.n + 2.0 * b.n + 2.0 * c.n + d.n)};
}

}  // namespace

std::vector<double> conductance_based_potential(std::span<const double> current_density,
                                                double step_ms, int substeps) {
  const double h = step_ms / substeps;
  State state{-64.0, 0.8, 0.1};
  for (double t = 0.0; t < 500.0; t += 0.02) {  // to rest
    state = runge_kutta(state, 0.0, 0.02);
  }
  std::vector<double> potential;
  potential.reserve(current_density.size());
  for (double current : current_density) {
    potential.push_back(state.v);
    for (int i = 0; i < substeps; ++i) {
      state = runge_kutta(state, current, h);
    }
  }
  return potential;
}

}  // namespace softsill::test

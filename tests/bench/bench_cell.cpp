#include "tests/bench/bench_cell.hpp"

#include <algorithm>
#include <cmath>

#include "estimator/fit/coordinates.hpp"
#include "estimator/fit/parallel.hpp"
#include "softsill/random.hpp"

namespace softsill::bench {

Recording make_cell(double seconds, double step_ms, bool with_voltage) {
  RandomStream random(20, 1);
  Sweep sweep;
  sweep.name = "s1";
  sweep.step_ms = step_ms;
  const auto samples = static_cast<std::size_t>(seconds * 1000.0 / step_ms);
  double current = 0.0, u = 0.0, eta_fast = 0.0, eta_slow = 0.0, theta_fast = 0.0, theta_slow = 0.0,
         noise = 0.0, last = -1e9;
  const auto keep = [&](double tau) { return std::exp(-step_ms / tau); };
  const auto kick = [&](double tau) { return std::sqrt(1.0 - keep(tau) * keep(tau)); };
  for (std::size_t i = 0; i < samples; ++i) {
    const double t = step_ms * static_cast<double>(i);
    current = keep(3.0) * current + kick(3.0) * random.normal();
    const double input = 0.1 + 0.12 * current;
    sweep.input.push_back(input);
    const double potential = -70.0 + u + eta_fast + eta_slow;
    noise = keep(2.0) * noise + 0.4 * kick(2.0) * random.normal();
    if (with_voltage) {
      sweep.voltage_mV.push_back(potential + noise);
    }
    const double rate = t - last < 2.5 ? 0.0 : std::exp(potential + 52.5 - theta_fast - theta_slow);
    if (random.uniform() < -std::expm1(-rate * step_ms)) {
      sweep.spikes_ms.push_back(t + step_ms * random.uniform());
      last = t;
      eta_fast -= 4.0;
      eta_slow -= 1.5;
      theta_fast += 8.0;
      theta_slow += 2.0;
    }
    u = keep(15.0) * u + 100.0 * (1.0 - keep(15.0)) * input;
    eta_fast *= keep(15.0);
    eta_slow *= keep(80.0);
    theta_fast *= keep(10.0);
    theta_slow *= keep(100.0);
  }
  sweep.analysed = {{0.0, sweep.end_ms()}};
  Recording recording;
  recording.cell = "bench";
  recording.sweeps.push_back(std::move(sweep));
  return recording;
}

Variant three_kernels(bool use_voltage) {
  Variant variant;
  variant.use_voltage = use_voltage;
  variant.eta.support_ms = 600.0;
  return variant;
}

DenseRows dense_rows(const Recording& recording, const Variant& variant, double step_ms) {
  const Coordinates coordinates(variant, true, false);
  const Exposure exposure =
      make_exposure(recording, variant.refractory, coordinates.support_ms(), FitOptions{});
  const SweepExposure& part = exposure.sweeps.front();
  std::vector<double> times, spike;
  for (const Interval& stretch : part.at_risk) {
    const double rows = std::floor(stretch.length_ms() / step_ms);
    for (double k = 0.0; k < rows; k += 1.0) {
      times.push_back(stretch.begin_ms + step_ms * (k + 0.5));
      spike.push_back(0.0);
    }
    if (rows > 0.0 &&
        std::binary_search(part.spikes_ms.begin(), part.spikes_ms.end(), stretch.end_ms)) {
      spike.back() = 1.0;
    }
  }
  DenseRows dense;
  dense.step_ms = step_ms;
  dense.rows.resize(static_cast<Eigen::Index>(times.size()),
                    static_cast<Eigen::Index>(coordinates.spike_columns().width));
  RowFiller(coordinates.spike_columns(), part).fill(times, dense.rows.data(), thread_count(0));
  dense.spike = Eigen::Map<const Vector>(spike.data(), static_cast<Eigen::Index>(spike.size()));
  return dense;
}

}  // namespace softsill::bench

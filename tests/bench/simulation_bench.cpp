// Steps of 0.1 ms per second on one core, 40 trials of one current. Argument: seconds per trial.

#include <benchmark/benchmark.h>

#include <string>

#include "softsill/simulation.hpp"
#include "tests/bench/bench_cell.hpp"

namespace softsill::bench {
namespace {

/// The bench cell as a model with exponential kernels, brought to about 10 Hz.
Model bench_model(EscapeKind kind) {
  Model model;
  model.kappa = {Basis::exponentials({15.0}), {100.0 / 15.0}};
  model.eta = {Basis::exponentials({15.0, 80.0}), {-4.0, -1.5}};
  model.theta_1 = {Basis::exponentials({10.0, 100.0}), {8.0, 2.0}};
  model.escape.kind = kind;
  model.escape.exponent = kind == EscapeKind::rectified_power ? 2.0 : 1.0;
  model.resting_potential = -70.0;
  model.threshold = -53.5;
  model.noise_level = 1.0;
  model.refractory_ms = 2.5;
  return model;
}

void simulation(benchmark::State& state, EscapeKind kind) {
  const Recording recording = make_cell(static_cast<double>(state.range(0)), 0.1, false);
  const Sweep& sweep = recording.sweeps.front();
  const Model model = bench_model(kind);
  SimulationOptions options;
  options.trials = 40;
  options.threads = 1;
  double spikes = 0.0, steps = 0.0;
  for (auto _ : state) {
    const SimulationResult result =
        simulate(model, DrivingInput{sweep.input, 0.0, sweep.step_ms, 0.1}, options);
    for (const auto& train : result.trains_ms) {
      spikes += static_cast<double>(train.size());
    }
    steps += 40.0 * static_cast<double>(sweep.input.size());
  }
  state.counters["steps_per_s"] = benchmark::Counter(steps, benchmark::Counter::kIsRate);
  state.counters["rate_Hz"] = spikes / (steps * 1e-4);
}
BENCHMARK_CAPTURE(simulation, exponential, EscapeKind::exponential)->Arg(2)->Arg(100);
BENCHMARK_CAPTURE(simulation, softplus, EscapeKind::softplus)->Arg(100);
BENCHMARK_CAPTURE(simulation, logistic, EscapeKind::logistic)->Arg(100);
BENCHMARK_CAPTURE(simulation, rectified_power, EscapeKind::rectified_power)->Arg(100);
BENCHMARK_CAPTURE(simulation, gaussian_tail, EscapeKind::gaussian_tail)->Arg(100);

}  // namespace
}  // namespace softsill::bench

BENCHMARK_MAIN();

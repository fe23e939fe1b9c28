#include "softsill/simulation.hpp"

#include <algorithm>
#include <atomic>
#include <cmath>
#include <exception>
#include <memory>
#include <mutex>
#include <string>
#include <thread>

#include "estimator/model/driving.hpp"
#include "estimator/model/steady_exp.hpp"
#include "estimator/model/trial.hpp"
#include "softsill/error.hpp"

namespace softsill {
namespace {

constexpr std::size_t steps_per_piece = std::size_t{1} << 18;

/// Calls work(0) .. work(pieces - 1) on a few threads; the first exception is thrown again here.
template <typename Work>
void on_threads(int threads, std::size_t pieces, Work&& work) {
  const int wanted =
      threads > 0 ? threads : std::max(1, static_cast<int>(std::thread::hardware_concurrency()));
  std::atomic<std::size_t> next{0};
  std::exception_ptr failure;
  std::mutex guard;
  const auto member = [&] {
    for (std::size_t piece = next++; piece < pieces; piece = next++) {
      try {
        work(piece);
      } catch (...) {
        const std::lock_guard<std::mutex> lock(guard);
        failure = failure ? failure : std::current_exception();
        next = pieces;
      }
    }
  };
  std::vector<std::thread> crew;
  for (std::size_t i = 1; i < std::min<std::size_t>(pieces, static_cast<std::size_t>(wanted));
       ++i) {
    crew.emplace_back(member);
  }
  member();
  for (std::thread& thread : crew) {
    thread.join();
  }
  if (failure) {
    std::rethrow_exception(failure);
  }
}

void check_kernel(const Kernel& kernel, const char* name) {
  if (kernel.coefficients.size() != kernel.basis.size()) {
    throw Error("", name,
                "has " + std::to_string(kernel.coefficients.size()) + " coefficients for " +
                    std::to_string(kernel.basis.size()) + " basis functions");
  }
  for (double value : kernel.coefficients) {
    if (!std::isfinite(value)) {
      throw Error("", name, "has a coefficient that is not finite");
    }
  }
}

bool positive(double value) { return std::isfinite(value) && value > 0.0; }

void check(const Model& model, const DrivingInput& driving, const SimulationOptions& options) {
  check_kernel(model.kappa, "kappa");
  check_kernel(model.eta, "eta");
  check_kernel(model.theta_1, "theta_1");
  if (!std::isfinite(model.resting_potential) || !std::isfinite(model.threshold)) {
    throw Error("", "model", "resting potential and threshold must be finite");
  }
  if (!positive(model.noise_level) || !positive(model.escape.lambda_0_per_ms) ||
      !positive(model.escape.exponent)) {
    throw Error("", "model", "noise level, lambda_0 and exponent must be positive");
  }
  if (!std::isfinite(model.refractory_ms) || model.refractory_ms < 0.0) {
    throw Error("", "model", "refractory time must be 0 or more");
  }
  if (driving.input.empty()) {
    throw Error("", "input", "holds no samples");
  }
  if (!positive(driving.step_ms) || !std::isfinite(driving.start_ms)) {
    throw Error("", "input", "sampling step must be positive and the start finite");
  }
  for (std::size_t i = 0; i < driving.input.size(); ++i) {
    if (!std::isfinite(driving.input[i])) {
      throw Error("", "input", "sample " + std::to_string(i + 1) + " is not a finite number");
    }
  }
  if (!std::isfinite(driving.before)) {
    throw Error("", "input", "value before the start is not a finite number");
  }
  if (options.trials < 1) {
    throw Error("", "simulation", "needs at least one trial");
  }
  const double steps = (driving.end_ms() - driving.start_ms) / options.step_ms;
  if (!positive(options.step_ms) || !(steps < 4e9)) {
    throw Error("", "simulation", "step must be positive and give fewer than 4e9 steps");
  }
  if (!positive(options.runaway_hz) || !positive(options.runaway_window_ms)) {
    throw Error("", "simulation", "runaway rate and window must be positive");
  }
  if (options.mean_voltage && model.scale == PotentialScale::noise_level) {
    throw Error("", "simulation", "a model in units of Delta has no potential in mV",
                "leave the mean voltage out, or fit with an anchor");
  }
}

std::vector<double> make_drive(const Model& model, const DrivingInput& driving,
                               const StepGrid& grid, int threads) {
  std::vector<double> drive(grid.steps);
  const double gap = model.resting_potential - model.threshold;
  const double per_step = model.escape.lambda_0_per_ms * grid.step_ms;
  const double per_delta = 1.0 / model.noise_level;
  const std::size_t pieces = (grid.steps + steps_per_piece - 1) / steps_per_piece;
  on_threads(threads, pieces, [&](std::size_t piece) {
    const std::size_t begin = piece * steps_per_piece;
    const std::size_t end = std::min(grid.steps, begin + steps_per_piece);
    const std::vector<double> effect = input_effect(model.kappa, driving, grid, begin, end);
    const double* from = effect.data();
    double* to = drive.data() + begin;
    for (std::size_t i = 0; i < effect.size(); ++i) {
      to[i] = (gap + from[i]) * per_delta;
    }
    if (model.escape.kind == EscapeKind::exponential) {
      for (std::size_t i = 0; i < effect.size(); ++i) {
        // exp(+-300) per step is as good as certain or impossible, and far from denormal numbers.
        double x = to[i];
        x = x < -300.0 ? -300.0 : x;
        x = x > 300.0 ? 300.0 : x;
        to[i] = per_step * steady_exp(x);
      }
    }
  });
  return drive;
}

TrialPlan make_plan(const Model& model, const DrivingInput& driving, const StepGrid& grid,
                    const SimulationOptions& options) {
  TrialPlan plan;
  plan.start_ms = grid.start_ms;
  plan.end_ms = grid.end_ms;
  plan.step_ms = grid.step_ms;
  plan.drive = make_drive(model, driving, grid, options.threads);
  std::vector<ScaledKernel> kernels;
  if (model.eta.present()) {
    kernels.push_back({model.eta, 1.0 / model.noise_level});
  }
  if (model.theta_1.present()) {
    kernels.push_back({model.theta_1, -1.0 / model.noise_level});
  }
  auto history = std::make_unique<HistoryTables>(kernels, grid.step_ms);
  if (model.escape.kind == EscapeKind::exponential) {
    history->to_factors();
  } else {
    plan.hazard = std::make_unique<HazardTable>(model.escape, grid.step_ms);
  }
  plan.history = std::move(history);
  plan.refractory_steps = model.refractory_ms / grid.step_ms;
  double limit_hz = options.runaway_hz;
  if (model.refractory_ms > 0.0) {
    limit_hz = std::min(limit_hz, 900.0 / model.refractory_ms);
  }
  plan.runaway_window_ms = options.runaway_window_ms;
  plan.runaway_spikes = std::max<std::size_t>(
      10, static_cast<std::size_t>(std::ceil(limit_hz * options.runaway_window_ms / 1000.0)));
  return plan;
}

/// E_0 + kappa * I + mean over trials of the summed eta, at the middles of the steps.
std::vector<double> mean_voltage(const Model& model, const DrivingInput& driving,
                                 const StepGrid& grid, const std::vector<double>& pooled_spikes,
                                 double trials, int threads) {
  std::vector<double> voltage(grid.steps);
  std::unique_ptr<HistoryTables> table;
  if (model.eta.present() && model.eta.basis.family != KernelFamily::exponentials) {
    table = std::make_unique<HistoryTables>(std::vector<ScaledKernel>{{model.eta, 1.0 / trials}},
                                            grid.step_ms);
  }
  const std::size_t pieces = (grid.steps + steps_per_piece - 1) / steps_per_piece;
  on_threads(threads, pieces, [&](std::size_t piece) {
    const std::size_t begin = piece * steps_per_piece;
    const std::size_t end = std::min(grid.steps, begin + steps_per_piece);
    const std::vector<double> effect = input_effect(model.kappa, driving, grid, begin, end);
    for (std::size_t i = begin; i < end; ++i) {
      voltage[i] = model.resting_potential + effect[i - begin];
    }
    if (!model.eta.present()) {
      return;
    }
    const auto spike_before = [&](double t_ms) {
      return std::lower_bound(pooled_spikes.begin(), pooled_spikes.end(), t_ms);
    };
    const auto from = spike_before(grid.middle(begin) - reach_of(model.eta) - grid.step_ms);
    const auto to = spike_before(grid.middle(end - 1));
    if (!table) {
      std::vector<double> times;
      for (std::size_t i = begin; i < end; ++i) {
        times.push_back(grid.middle(i));
      }
      const std::size_t size = model.eta.basis.size();
      std::vector<double> rows(times.size() * size);
      history_responses(model.eta.basis, std::vector<double>(from, to), times, rows);
      for (std::size_t i = 0; i < times.size(); ++i) {
        for (std::size_t k = 0; k < size; ++k) {
          voltage[begin + i] += model.eta.coefficients[k] * rows[i * size + k] / trials;
        }
      }
      return;
    }
    for (auto spike = from; spike != to; ++spike) {
      const double place = (*spike - grid.start_ms) / grid.step_ms;
      const auto step = static_cast<std::size_t>(place);
      const double phase = place - static_cast<double>(step);
      if (step >= begin && step < end && phase < 0.5) {
        voltage[step] += table->within_step(0.5 - phase);
      }
      const std::span<const double> effects = table->lasting(phase);
      const std::size_t last = std::min(end, step + effects.size());
      for (std::size_t i = std::max(begin, step + 1); i < last; ++i) {
        voltage[i] += effects[i - step];
      }
    }
  });
  return voltage;
}

}  // namespace

SimulationResult simulate(const Model& model, const DrivingInput& driving,
                          const SimulationOptions& options) {
  check(model, driving, options);
  const StepGrid grid(driving, options.step_ms);
  const TrialPlan plan = make_plan(model, driving, grid, options);

  SimulationResult result;
  result.start_ms = grid.start_ms;
  result.end_ms = grid.end_ms;
  result.step_ms = grid.step_ms;
  std::vector<TrialOutcome> outcomes(options.trials);
  std::vector<char> finished(options.trials, 0);
  std::size_t done = 0;
  std::atomic<bool> stop{false};
  std::mutex guard;
  on_threads(options.threads, options.trials, [&](std::size_t trial) {
    if (stop) {
      return;
    }
    outcomes[trial] = run_trial(plan, RandomStream(options.seed, trial));
    finished[trial] = 1;
    if (options.progress) {
      const std::lock_guard<std::mutex> lock(guard);
      ++done;
      if (!options.progress(static_cast<double>(done) / static_cast<double>(options.trials))) {
        stop = true;
      }
    }
  });
  std::vector<double> pooled;
  std::size_t averaged = 0;
  for (std::size_t trial = 0; trial < options.trials; ++trial) {
    if (!finished[trial]) {
      result.interrupted = true;
      break;  // what is returned is always the first so many trials
    }
    TrialOutcome& outcome = outcomes[trial];
    if (outcome.runaway) {
      result.runaways.push_back({trial, outcome.stopped_ms});
    } else if (options.mean_voltage) {
      pooled.insert(pooled.end(), outcome.spikes_ms.begin(), outcome.spikes_ms.end());
      ++averaged;
    }
    result.trains_ms.push_back(std::move(outcome.spikes_ms));
  }
  if (averaged > 0 && !result.interrupted) {
    std::sort(pooled.begin(), pooled.end());
    result.mean_voltage_mV =
        mean_voltage(model, driving, grid, pooled, static_cast<double>(averaged), options.threads);
  }
  return result;
}

std::size_t SimulationResult::spike_count() const {
  std::size_t count = 0;
  for (const std::vector<double>& train : trains_ms) {
    count += train.size();
  }
  return count;
}

double SimulationResult::mean_rate_hz() const {
  double time_ms = static_cast<double>(trains_ms.size()) * (end_ms - start_ms);
  for (const Runaway& runaway : runaways) {
    time_ms -= end_ms - runaway.stopped_ms;
  }
  return time_ms > 0.0 ? 1000.0 * static_cast<double>(spike_count()) / time_ms : 0.0;
}

std::optional<double> SimulationResult::interval_cv() const {
  double count = 0.0, mean = 0.0, squares = 0.0;
  for (const std::vector<double>& train : trains_ms) {
    for (std::size_t i = 1; i < train.size(); ++i) {
      const double interval = train[i] - train[i - 1];
      count += 1.0;
      const double off = interval - mean;
      mean += off / count;
      squares += off * (interval - mean);
    }
  }
  if (count < 2.0) {
    return std::nullopt;
  }
  return std::sqrt(squares / (count - 1.0)) / mean;
}

}  // namespace softsill

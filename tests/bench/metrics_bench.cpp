// Measures of spike trains against the textbook loops they replace, in one run. Before timing, both
// must agree to 1e-9.
#include <benchmark/benchmark.h>

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <cstdlib>

#include "softsill/metrics/distances.hpp"
#include "softsill/metrics/pairs.hpp"
#include "softsill/metrics/reliability.hpp"
#include "tests/metrics/poisson_trains.hpp"

namespace {

using namespace softsill::metrics;

std::vector<double> train(std::size_t spikes, double rate_hz, std::uint64_t stream) {
  softsill::RandomStream random(1, stream);
  std::vector<double> times;
  double now = 0.0;
  while (times.size() < spikes) {
    now += random.exponential() * 1000.0 / rate_hz;
    times.push_back(now);
  }
  return times;
}

void must_agree(double a, double b) {
  if (!(std::abs(a - b) <= 1e-9 * std::max(1.0, std::abs(b)))) {
    std::fprintf(stderr, "results differ: %.17g and %.17g\n", a, b);
    std::exit(1);
  }
}

double full_table(const std::vector<double>& a, const std::vector<double>& b, double q) {
  std::vector<std::vector<double>> g(a.size() + 1, std::vector<double>(b.size() + 1));
  for (std::size_t i = 0; i <= a.size(); ++i) {
    for (std::size_t j = 0; j <= b.size(); ++j) {
      g[i][j] = i == 0 || j == 0 ? static_cast<double>(i + j)
                                 : std::min({g[i - 1][j] + 1.0, g[i][j - 1] + 1.0,
                                             g[i - 1][j - 1] + q * std::abs(a[i - 1] - b[j - 1])});
    }
  }
  return g[a.size()][b.size()];
}

double double_loop(const std::vector<double>& a, const std::vector<double>& b, double tau) {
  const auto sum = [tau](const std::vector<double>& x, const std::vector<double>& y) {
    double total = 0.0;
    for (const double s : x) {
      for (const double t : y) {
        total += std::exp(-std::abs(s - t) / tau);
      }
    }
    return total;
  };
  return 0.5 * sum(a, a) + 0.5 * sum(b, b) - sum(a, b);
}

void victor_purpura_banded(benchmark::State& state) {
  const auto n = static_cast<std::size_t>(state.range(0));
  const auto a = train(n, 20.0, 1), b = train(n, 20.0, 2);
  must_agree(victor_purpura(a, b, 200.0), full_table(a, b, 0.2));
  for (auto _ : state) {
    benchmark::DoNotOptimize(victor_purpura(a, b, 200.0));
  }
}
BENCHMARK(victor_purpura_banded)->Arg(200)->Arg(1000);

void victor_purpura_full_table(benchmark::State& state) {
  const auto n = static_cast<std::size_t>(state.range(0));
  const auto a = train(n, 20.0, 1), b = train(n, 20.0, 2);
  for (auto _ : state) {
    benchmark::DoNotOptimize(full_table(a, b, 0.2));
  }
}
BENCHMARK(victor_purpura_full_table)->Arg(200)->Arg(1000);

void van_rossum_linear(benchmark::State& state) {
  const auto a = train(1000, 20.0, 1), b = train(1000, 20.0, 2);
  must_agree(van_rossum_squared(a, b, 10.0), double_loop(a, b, 10.0));
  for (auto _ : state) {
    benchmark::DoNotOptimize(van_rossum_squared(a, b, 10.0));
  }
}
BENCHMARK(van_rossum_linear);

void van_rossum_double_loop(benchmark::State& state) {
  const auto a = train(1000, 20.0, 1), b = train(1000, 20.0, 2);
  for (auto _ : state) {
    benchmark::DoNotOptimize(double_loop(a, b, 10.0));
  }
}
BENCHMARK(van_rossum_double_loop);

TrialSet trials(std::size_t count, std::uint64_t stream) {
  TrialSet set{{}, {0.0, 1e5}};
  for (std::size_t i = 0; i < count; ++i) {
    set.trains_ms.push_back(train(200, 20.0, stream + i));
  }
  return set;
}

void six_matrices(benchmark::State& state) {
  const TrialSet a = trials(100, 10), b = trials(100, 1000);
  for (auto _ : state) {
    for (const auto measure :
         {PairMeasure::coincidence, PairMeasure::victor_purpura, PairMeasure::van_rossum,
          PairMeasure::schreiber, PairMeasure::isi_distance, PairMeasure::spike_distance}) {
      benchmark::DoNotOptimize(pair_matrix(measure, a, b));
    }
  }
}
BENCHMARK(six_matrices)->Unit(benchmark::kMillisecond);

void one_matrix(benchmark::State& state) {
  const TrialSet a = trials(100, 10), b = trials(100, 1000);
  const auto measure = static_cast<PairMeasure>(state.range(0));
  state.SetLabel(name_of(measure));
  for (auto _ : state) {
    benchmark::DoNotOptimize(pair_matrix(measure, a, b));
  }
}
BENCHMARK(one_matrix)->DenseRange(0, 6)->Unit(benchmark::kMillisecond);

void bootstrap_of_pairs(benchmark::State& state) {
  const PairTable table = pair_table(PairMeasure::coincidence, trials(50, 10), trials(50, 1000));
  BootstrapOptions options;
  options.replicates = 10000;
  const auto statistic = static_cast<PairStatistic>(state.range(0));
  for (auto _ : state) {
    benchmark::DoNotOptimize(bootstrap_pairs(table, statistic, options));
  }
}
BENCHMARK(bootstrap_of_pairs)
    ->Arg(static_cast<int>(PairStatistic::cell_cell))
    ->Arg(static_cast<int>(PairStatistic::cell_model))
    ->Arg(static_cast<int>(PairStatistic::model_over_cell))
    ->Unit(benchmark::kMillisecond);

}  // namespace

BENCHMARK_MAIN();

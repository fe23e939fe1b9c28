// One value + gradient + information evaluation on a fit's nodes, against the rank-k update alone
// (BLAS dsyrk) of the dense rows it replaces. Argument: seconds of recording.

#include <benchmark/benchmark.h>

#include "estimator/fit/objective.hpp"
#include "softsill/fit.hpp"
#include "tests/bench/bench_cell.hpp"

extern "C" void dsyrk_(const char* uplo, const char* trans, const int* n, const int* k,
                       const double* alpha, const double* a, const int* lda, const double* beta,
                       double* c, const int* ldc);

namespace softsill::bench {
namespace {

/// Nodes as dense in number as a fit of this cell uses them: two-point cells of 2 ms.
SpikeDesign node_design(const Variant& variant, const Exposure& exposure) {
  const Coordinates coordinates(variant, true, false);
  const NodePlan plan{&exposure, place_nodes(graded_cells(exposure, 2.0, CellRule::two_point)),
                      1000.0};
  return make_design(coordinates.spike_columns(), plan, 2);
}

void evaluation(benchmark::State& state) {
  const Recording recording = make_cell(static_cast<double>(state.range(0)), 0.05, false);
  const Variant variant = three_kernels(true);
  const Exposure exposure = make_exposure(
      recording, variant.refractory, Coordinates(variant, true, false).support_ms(), FitOptions{});
  const SpikeDesign design = node_design(variant, exposure);
  Vector beta = Vector::Zero(design.width());
  beta[0] = -5.0;
  for (auto _ : state) {
    benchmark::DoNotOptimize(evaluate_spikes(design, Escape{}, beta, Want::derivatives, 1));
  }
  state.counters["rows"] = static_cast<double>(design.nodes.rows());
}
BENCHMARK(evaluation)->Arg(10)->Arg(100)->Unit(benchmark::kMillisecond);

void dense_rank_update(benchmark::State& state) {
  const Recording recording = make_cell(static_cast<double>(state.range(0)), 0.05, false);
  const DenseRows dense = dense_rows(recording, three_kernels(true), 0.1);
  // Row-major rows are a column-major matrix with one row per column: C = A A^T.
  const int n = static_cast<int>(dense.rows.cols()), k = static_cast<int>(dense.rows.rows());
  const double one = 1.0, zero = 0.0;
  Matrix square(n, n);
  for (auto _ : state) {
    dsyrk_("L", "N", &n, &k, &one, dense.rows.data(), &n, &zero, square.data(), &n);
    benchmark::DoNotOptimize(square.data());
  }
  state.counters["rows"] = k;
}
BENCHMARK(dense_rank_update)->Arg(10)->Arg(100)->Unit(benchmark::kMillisecond);

}  // namespace
}  // namespace softsill::bench

BENCHMARK_MAIN();

// Whole fits for whole_programs.py.
//   fit_cost fit SECONDS STEP_MS joint|spikes   one fit; prints key=value words
//   fit_cost rows SECONDS STEP_MS PREFIX        dense 0.1 ms rows as raw doubles, column by column
//   fit_cost same-rows SECONDS STEP_MS          our maximum on those rows, for comparison with R's

#include <chrono>
#include <cstdio>
#include <cstring>
#include <fstream>
#include <string>

#include "estimator/fit/ceres_minimizer.hpp"
#include "estimator/fit/objective.hpp"
#include "softsill/fit.hpp"
#include "tests/bench/bench_cell.hpp"

namespace softsill::bench {
namespace {

double now() {
  return std::chrono::duration<double>(std::chrono::steady_clock::now().time_since_epoch()).count();
}

int run_fit(double seconds, double step_ms, bool joint) {
  const Recording recording = make_cell(seconds, step_ms, joint);
  const Variant variant = three_kernels(joint);
  const double begin = now();
  const Estimate estimate = fit(recording, variant);
  std::printf(
      "seconds=%.4f spikes=%zu spike_log_likelihood=%.6f nodes=%zu coordinates=%zu status=%s\n",
      now() - begin, estimate.spikes, estimate.spike_log_likelihood, estimate.node_error.nodes,
      estimate.coordinates.size(), std::string(to_string(estimate.status)).c_str());
  return trustworthy(estimate.status) ? 0 : 3;
}

void write_rows(double seconds, double step_ms, const std::string& prefix) {
  const DenseRows dense = dense_rows(make_cell(seconds, step_ms, true), three_kernels(true), 0.1);
  std::ofstream rows(prefix + ".rows", std::ios::binary);
  std::ofstream spikes(prefix + ".spikes", std::ios::binary);
  const auto bytes = [](Eigen::Index n) { return static_cast<std::streamsize>(n) * 8; };
  for (Eigen::Index k = 0; k < dense.rows.cols(); ++k) {
    const Vector column = dense.rows.col(k);
    rows.write(reinterpret_cast<const char*>(column.data()), bytes(column.size()));
  }
  spikes.write(reinterpret_cast<const char*>(dense.spike.data()), bytes(dense.spike.size()));
  std::printf("rows=%ld columns=%ld\n", static_cast<long>(dense.rows.rows()),
              static_cast<long>(dense.rows.cols()));
}

/// Poisson rows: every row carries the integral, rows with a spike the log hazard too. Right after
/// the refractory time no spike falls, so some coefficients run off to infinity and the maximum
/// is only approached: R stops where its deviance no longer changes, this where the ridge holds.
/// Columns that end within the refractory time are 0 in every row; the ridge keeps them at 0.
struct RowsObjective : Objective {
  SpikeDesign design;
  Eigen::Index size() const override { return design.width(); }
  Evaluated evaluate(const Vector& beta, Want want) override {
    const SpikeEvaluation e = evaluate_spikes(design, Escape{}, beta, want, 2);
    const double ridge = 1e-14;  // 1e-10 would cost 0.09 nats
    Evaluated out;
    out.value = -e.log_likelihood + 0.5 * ridge * beta.squaredNorm();
    const Eigen::Index n = size();
    if (want != Want::value) {
      out.gradient = -e.gradient.head(n) + ridge * beta;
    }
    if (want == Want::derivatives || want == Want::derivatives_and_expected) {
      out.hessian = e.information.topLeftCorner(n, n) + ridge * Matrix::Identity(n, n);
    }
    if (want == Want::derivatives_and_expected) {
      out.expected = e.expected.topLeftCorner(n, n) + ridge * Matrix::Identity(n, n);
    }
    return out;
  }
};

void same_rows(double seconds, double step_ms) {
  const DenseRows dense = dense_rows(make_cell(seconds, step_ms, true), three_kernels(true), 0.1);
  RowsObjective objective;
  objective.design.nodes = dense.rows;
  objective.design.weights_ms = Vector::Constant(dense.rows.rows(), dense.step_ms);
  objective.design.spikes.resize(static_cast<Eigen::Index>(dense.spike.sum()), dense.rows.cols());
  Eigen::Index spike = 0;
  for (Eigen::Index i = 0; i < dense.spike.size(); ++i) {
    if (dense.spike[i] > 0.0) {
      objective.design.spikes.row(spike++) = dense.rows.row(i);
    }
  }
  Vector start = Vector::Zero(objective.size());
  start[0] = std::log(static_cast<double>(spike) /
                      (dense.step_ms * static_cast<double>(dense.rows.rows())));
  const double begin = now();
  const Minimum minimum = minimize(objective, start);
  std::printf(
      "seconds=%.4f log_likelihood=%.6f passed=%d\n", now() - begin,
      evaluate_spikes(objective.design, Escape{}, minimum.theta, Want::value, 2).log_likelihood,
      minimum.passed() ? 1 : 0);
}

}  // namespace
}  // namespace softsill::bench

int main(int count, char** words) {
  using namespace softsill::bench;
  if (count == 5 && std::strcmp(words[1], "fit") == 0) {
    return run_fit(std::stod(words[2]), std::stod(words[3]), std::strcmp(words[4], "joint") == 0);
  }
  if (count == 5 && std::strcmp(words[1], "rows") == 0) {
    write_rows(std::stod(words[2]), std::stod(words[3]), words[4]);
    return 0;
  }
  if (count == 4 && std::strcmp(words[1], "same-rows") == 0) {
    same_rows(std::stod(words[2]), std::stod(words[3]));
    return 0;
  }
  std::fprintf(stderr, "usage: see the head of tests/bench/fit_cost.cpp\n");
  return 2;
}

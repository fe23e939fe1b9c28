// How reliable is a cell over repeats of one current? No model, no files.
#include <cstdio>

#include "softsill/metrics/reliability.hpp"

using namespace softsill::metrics;

int main() {
  const TrialSet cell{{{12.1, 55.0, 80.4, 131.0, 174.9},
                       {11.8, 54.1, 132.2, 176.0},
                       {13.0, 55.6, 79.9, 130.5},
                       {12.4, 81.7, 131.3, 175.2},
                       {55.2, 80.8, 130.9, 174.0}},
                      {0.0, 200.0}};
  const PairTable pairs(pair_matrix(PairMeasure::coincidence, cell));
  BootstrapOptions options;
  options.seed = 7;
  const Bootstrap result = bootstrap_pairs(pairs, PairStatistic::cell_cell, options);
  std::printf("reliability %.3f, 95 %% %.3f to %.3f (seed 7)\n", result.estimate,
              result.interval->low, result.interval->high);
}

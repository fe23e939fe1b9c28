#include <cmath>
#include <numbers>

#include "metrics/trains/inner.hpp"
#include "softsill/error.hpp"
#include "softsill/metrics/reliability.hpp"

namespace softsill::metrics {
namespace {

// Sum over pairs with the spike of `later` not before that of `earlier` of exp(-gap / width).
double one_sided(Train earlier, Train later, double width_ms) {
  double sum = 0.0, running = 0.0, now = 0.0;
  std::size_t next = 0;
  for (const double time : later) {
    running *= std::exp((now - time) / width_ms);
    now = time;
    for (; next < earlier.size() && earlier[next] <= time; ++next) {
      running += std::exp((earlier[next] - time) / width_ms);
    }
    sum += running;
  }
  return sum;
}

double product(Train a, Train b, ProductKernel kernel, double width_ms) {
  switch (kernel) {
    case ProductKernel::box:
      return inner::coincidences(a, b, width_ms, CountingRule::pairs);
    case ProductKernel::two_sided_exponential:
      return inner::exponential_cross(a, b, width_ms);
    case ProductKernel::one_sided_exponential:
      return one_sided(a, b, width_ms);
    case ProductKernel::gaussian:
      return inner::gaussian_cross(a, b, width_ms / std::numbers::sqrt2);
  }
  throw InternalError("set similarity: unknown kernel");
}

void check_width(double width_ms) {
  if (!(width_ms > 0.0) || !std::isfinite(width_ms)) {
    throw Error("", "set similarity", "the width of the kernel must be a positive number of ms",
                "4 ms is usual");
  }
}

PairMatrix within(const TrialSet& set, ProductKernel kernel, double width_ms) {
  PairMatrix matrix = product_matrix(set, set, kernel, width_ms);
  for (std::size_t i = 0; i < matrix.rows; ++i) {
    for (std::size_t j = 0; j < i; ++j) {
      matrix(i, j) = matrix(j, i) = 0.5 * (matrix(i, j) + matrix(j, i));
    }
  }
  return matrix;
}

}  // namespace

PairMatrix product_matrix(const TrialSet& rows, const TrialSet& columns, ProductKernel kernel,
                          double width_ms) {
  check_trials(rows, "first set");
  check_trials(columns, "second set");
  check_width(width_ms);
  if (!(rows.window == columns.window)) {
    throw Error("", "set similarity", "the two sets were observed in different windows",
                "cut both to one window");
  }
  PairMatrix matrix{rows.size(), columns.size(), {}};
  matrix.values.resize(rows.size() * columns.size());
  for (std::size_t i = 0; i < rows.size(); ++i) {
    for (std::size_t j = 0; j < columns.size(); ++j) {
      matrix(i, j) = product(rows.trains_ms[i], columns.trains_ms[j], kernel, width_ms);
    }
  }
  return matrix;
}

PairTable product_table(const TrialSet& cell, const TrialSet& model, ProductKernel kernel,
                        double width_ms) {
  return {within(cell, kernel, width_ms), product_matrix(cell, model, kernel, width_ms),
          within(model, kernel, width_ms)};
}

SetSimilarity set_similarity(const TrialSet& cell, const TrialSet& model, ProductKernel kernel,
                             double width_ms) {
  return set_similarity(product_table(cell, model, kernel, width_ms));
}

SetSimilarity set_similarity(const PairTable& products) {
  const PairMeans means = products.means();
  SetSimilarity result;
  if (!means.cell_cell || !means.model_model) {
    result.absence = "it needs at least 2 trials of the cell and 2 of the model";
    return result;
  }
  result.cross = *means.cell_model;
  result.cell = *means.cell_cell;
  result.model = *means.model_model;
  if (!(result.cell + result.model > 0.0)) {
    result.absence = "no two trials of the cell or of the model share a spike within the kernel";
    return result;
  }
  result.value = 2.0 * result.cross / (result.cell + result.model);
  if (result.cell > 0.0 && result.model > 0.0) {
    result.angular = result.cross / std::sqrt(result.cell * result.model);
  }
  return result;
}

}  // namespace softsill::metrics

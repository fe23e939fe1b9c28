#include <cmath>
#include <limits>
#include <string>
#include <utility>

#include "softsill/error.hpp"
#include "softsill/metrics/reliability.hpp"

namespace softsill::metrics {
namespace {

constexpr double undefined = std::numeric_limits<double>::quiet_NaN();

using Weights = std::span<const double>;

// Sum over rows and columns of r_i m_ij c_j. Whole rows at a time: no sum depends on itself, so
// the inner loop is vectorised; rows that were not drawn cost nothing.
double form(const std::vector<double>& matrix, Weights rows, Weights columns) {
  thread_local std::vector<double> sums;
  sums.assign(columns.size(), 0.0);
  for (std::size_t i = 0; i < rows.size(); ++i) {
    const double weight = rows[i];
    if (weight == 0.0) {
      continue;
    }
    const double* row = matrix.data() + i * columns.size();
    for (std::size_t j = 0; j < columns.size(); ++j) {
      sums[j] += weight * row[j];
    }
  }
  double total = 0.0;
  for (std::size_t j = 0; j < columns.size(); ++j) {
    total += sums[j] * columns[j];
  }
  return total;
}

double sum(Weights weights) {
  double total = 0.0;
  for (const double weight : weights) {
    total += weight;
  }
  return total;
}

// Resampling trials two ways counts the noise of single pairs about three times (Owen 2007, Ann.
// Appl. Stat. 1:386). It rules the covariances of single trials, so their intervals are wide at
// every number of trials tried (98 % held the truth with 5, 10 and 20: coverage_test.cpp), not
// narrow like others from few trials.
Bootstrap said_to_be_wide(Bootstrap result) {
  std::erase_if(result.warnings, [](const std::string& warning) {
    return warning.find(few_trials_words) != std::string::npos;
  });
  if (result.interval) {
    result.warnings.push_back(
        "an interval of this ratio is wider than need be: at a level of 95 % it held the truth in "
        "98 % of simulated cells");
  }
  return result;
}

std::optional<double> present(double value) {
  return std::isnan(value) ? std::nullopt : std::optional(value);
}

}  // namespace

PairTable::Part PairTable::prepare(PairMatrix matrix) {
  Part part{std::move(matrix), {}};
  for (std::size_t i = 0; i < part.matrix.values.size(); ++i) {
    double& value = part.matrix.values[i];
    if (std::isnan(value)) {
      if (part.known.empty()) {
        part.known.assign(part.matrix.values.size(), 1.0);
      }
      part.known[i] = 0.0;
      value = 0.0;
    }
  }
  return part;
}

PairTable::PairTable(PairMatrix cell_cell, PairMatrix cell_model, PairMatrix model_model) {
  if (cell_cell.rows != cell_cell.columns || model_model.rows != model_model.columns ||
      cell_model.rows != cell_cell.rows || cell_model.columns != model_model.rows) {
    throw Error("", "table of pairs", "the three matrices do not belong to the same trials");
  }
  for (PairMatrix* square : {&cell_cell, &model_model}) {
    // The diagonal never counts; as 0 it need not be taken off.
    for (std::size_t i = 0; i < square->rows; ++i) {
      (*square)(i, i) = 0.0;
    }
  }
  cell_cell_ = prepare(std::move(cell_cell));
  cell_model_ = prepare(std::move(cell_model));
  model_model_ = prepare(std::move(model_model));
}

PairTable::PairTable(PairMatrix cell_cell)
    : PairTable(cell_cell, PairMatrix{cell_cell.rows, 0, {}}, PairMatrix{}) {}

double PairTable::off_diagonal_mean(const Part& part, Weights weights) {
  if (weights.size() != part.matrix.rows) {
    throw InternalError("PairTable: as many weights as trials are needed");
  }
  double squares = 0.0;
  for (const double weight : weights) {
    squares += weight * weight;
  }
  double pairs = 0.0;
  if (part.known.empty()) {
    const double total = sum(weights);
    pairs = total * total - squares;
  } else {
    pairs = form(part.known, weights, weights) - squares;  // the diagonal is marked as known
  }
  return pairs > 0.5 ? form(part.matrix.values, weights, weights) / pairs : undefined;
}

double PairTable::cell_cell_mean(Weights cell) const { return off_diagonal_mean(cell_cell_, cell); }

double PairTable::model_model_mean(Weights model) const {
  return off_diagonal_mean(model_model_, model);
}

double PairTable::cell_model_mean(Weights cell, Weights model) const {
  if (cell.size() != cells() || model.size() != models()) {
    throw InternalError("PairTable: as many weights as trials are needed");
  }
  const double pairs =
      cell_model_.known.empty() ? sum(cell) * sum(model) : form(cell_model_.known, cell, model);
  return pairs > 0.5 ? form(cell_model_.matrix.values, cell, model) / pairs : undefined;
}

PairMeans PairTable::means() const {
  const std::vector<double> cell(cells(), 1.0), model(models(), 1.0);
  return {present(cell_cell_mean(cell)), present(cell_model_mean(cell, model)),
          present(model_model_mean(model))};
}

PairTable pair_table(PairMeasure measure, const TrialSet& cell, const TrialSet& model,
                     const PairSettings& settings) {
  return {pair_matrix(measure, cell, settings), pair_matrix(measure, cell, model, settings),
          pair_matrix(measure, model, settings)};
}

Bootstrap bootstrap_pairs(const PairTable& table, PairStatistic statistic,
                          const BootstrapOptions& options) {
  const auto cc = [&](Weights cell, Weights) { return table.cell_cell_mean(cell); };
  const auto cm = [&](Weights cell, Weights model) { return table.cell_model_mean(cell, model); };
  const std::size_t n = table.cells(), m = table.models();
  switch (statistic) {
    case PairStatistic::cell_cell:
      return bootstrap(n, 0, cc, options);
    case PairStatistic::model_model:
      return bootstrap(
          m, 0, [&](Weights model, Weights) { return table.model_model_mean(model); }, options);
    case PairStatistic::cell_model:
      return bootstrap(n, m, cm, options);
    case PairStatistic::model_over_cell:
      return bootstrap_ratio(n, m, cm, cc, options);
    case PairStatistic::set_similarity:
      return bootstrap_ratio(
          n, m, [&](Weights cell, Weights model) { return 2.0 * cm(cell, model); },
          [&](Weights cell, Weights model) {
            return table.cell_cell_mean(cell) + table.model_model_mean(model);
          },
          options);
    case PairStatistic::explained_variance:
      return said_to_be_wide(bootstrap_ratio(
          n, m,
          [&](Weights cell, Weights model) {
            return 2.0 * cm(cell, model) - table.model_model_mean(model);
          },
          cc, options));
    case PairStatistic::normalised_correlation:
      return said_to_be_wide(bootstrap_ratio(
          n, m, cm,
          [&](Weights cell, Weights model) {
            const double signal = table.cell_cell_mean(cell);
            const double power = table.model_model_mean(model);
            return signal > 0.0 && power > 0.0 ? std::sqrt(signal * power) : undefined;
          },
          options));
  }
  throw InternalError("bootstrap_pairs: unknown statistic");
}

}  // namespace softsill::metrics

#pragma once

/// \file reliability.hpp
/// Across repeats: a cell against itself, a model against the cell, a model against itself. Pairs
/// of a trial with itself never count.

#include <cstddef>
#include <optional>
#include <span>
#include <string>

#include "softsill/metrics/bootstrap.hpp"
#include "softsill/metrics/pairs.hpp"

namespace softsill::metrics {

/// Means over pairs; absent when no pair is defined.
struct PairMeans {
  std::optional<double> cell_cell, cell_model, model_model;
};

/// A measure between all trials of a cell and a model: the three matrices, ready for resampling.
class PairTable {
 public:
  /// Diagonals are set to 0: pairs of a trial with itself never count.
  /// \param cell_cell, model_model  square and symmetric; \param cell_model  rows are the cell
  /// \throws Error on sizes that do not fit
  PairTable(PairMatrix cell_cell, PairMatrix cell_model, PairMatrix model_model);
  /// Repeats of a cell alone.
  explicit PairTable(PairMatrix cell_cell);

  std::size_t cells() const { return cell_cell_.matrix.rows; }
  std::size_t models() const { return model_model_.matrix.rows; }
  const PairMatrix& cell_cell() const { return cell_cell_.matrix; }
  const PairMatrix& cell_model() const { return cell_model_.matrix; }
  const PairMatrix& model_model() const { return model_model_.matrix; }

  PairMeans means() const;
  /// Weighted means. A trial drawn w times makes w^2 pairs with itself; all are left out, copies
  /// with copies too (they would score as identical). NaN where no pair is left.
  double cell_cell_mean(std::span<const double> cell) const;
  double cell_model_mean(std::span<const double> cell, std::span<const double> model) const;
  double model_model_mean(std::span<const double> model) const;

 private:
  struct Part {
    PairMatrix matrix;          // undefined pairs hold 0 here
    std::vector<double> known;  // 1 where defined; empty when all are
  };
  static Part prepare(PairMatrix matrix);
  static double off_diagonal_mean(const Part& part, std::span<const double> weights);

  Part cell_cell_, cell_model_, model_model_;
};

/// Computes the three matrices of a measure.
PairTable pair_table(PairMeasure measure, const TrialSet& cell, const TrialSet& model,
                     const PairSettings& settings = {});

/// Inner product of two trains: sum over pairs of spikes of K(t - t'), K(0) = 1.
enum class ProductKernel {
  box,                    ///< 1 for |t - t'| <= width
  two_sided_exponential,  ///< exp(-|t - t'| / width)
  one_sided_exponential,  ///< exp(-(t_model - t_cell) / width) for t_model >= t_cell, else 0;
                          ///< within a set the mean of both orders
  gaussian                ///< exp(-(t - t')^2 / (2 width^2))
};

/// Set similarity of Naud, Gerhard, Mensi & Gerstner (2011, Neural Comput. 23:3016):
/// 2 L / (R_cell + R_model), with R over pairs of different trials, so that few trials do not bias
/// it. It compares intensities; it is not corrected for chance (two constant equal rates give 1)
/// and may exceed 1.
struct SetSimilarity {
  std::optional<double> value;     ///< 2 L / (R_cell + R_model)
  std::optional<double> angular;   ///< L / sqrt(R_cell R_model)
  double cross = 0.0;              ///< L: mean product over cell-model pairs
  double cell = 0.0, model = 0.0;  ///< R
  std::string absence;             ///< why there is no value
};

PairMatrix product_matrix(const TrialSet& rows, const TrialSet& columns, ProductKernel kernel,
                          double width_ms);
/// Table of inner products, for resampling.
PairTable product_table(const TrialSet& cell, const TrialSet& model, ProductKernel kernel,
                        double width_ms);
/// \throws Error on a width that is not positive
SetSimilarity set_similarity(const TrialSet& cell, const TrialSet& model,
                             ProductKernel kernel = ProductKernel::box, double width_ms = 4.0);
SetSimilarity set_similarity(const PairTable& products);

/// Which number of a table of pairs.
enum class PairStatistic {
  cell_cell,  ///< intrinsic reliability
  cell_model,
  model_model,
  model_over_cell,  ///< cell_model / cell_cell, a ratio of means
  set_similarity,   ///< 2 cell_model / (cell_cell + model_model), of a table of products
  /// Of a table of covariances over time (psth.hpp): (2 cell_model - model_model) / cell_cell, the
  /// share of the signal power that the model explains.
  explained_variance,
  /// Of a table of covariances: cell_model / sqrt(cell_cell model_model).
  normalised_correlation
};

/// Two-way resampling of cell trials and model trials (one-way for cell_cell and model_model).
/// Ratios are resampled as ratios.
Bootstrap bootstrap_pairs(const PairTable& table, PairStatistic statistic,
                          const BootstrapOptions& options = {});

}  // namespace softsill::metrics

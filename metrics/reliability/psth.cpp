#include "softsill/metrics/psth.hpp"

#include <Eigen/Core>
#include <algorithm>
#include <cmath>
#include <cstdio>
#include <numbers>

#include "softsill/error.hpp"

namespace softsill::metrics {
namespace {

using RowMatrix = Eigen::Matrix<double, Eigen::Dynamic, Eigen::Dynamic, Eigen::RowMajor>;

Eigen::Map<const RowMatrix> as_matrix(const RateTable& table) {
  return {table.rates.data(), static_cast<Eigen::Index>(table.trials),
          static_cast<Eigen::Index>(table.bins)};
}

void check(const PsthSettings& settings, const Window& window) {
  const bool bins = settings.kind == PsthSettings::Kind::bins;
  const double step = bins ? settings.width_ms : settings.step_ms;
  if (!(settings.width_ms > 0.0) || !std::isfinite(settings.width_ms) || !(step > 0.0) ||
      step > window.length_ms()) {
    throw Error("", "rate over time",
                "width and step must be positive and no longer than the window", "5 ms is usual");
  }
}

void add_bins(Train train, double begin, double step, std::span<double> rates) {
  for (const double time : train) {
    const auto bin = static_cast<std::size_t>((time - begin) / step);
    if (bin < rates.size()) {
      rates[bin] += 1.0 / step;
    }
  }
}

// Rates at the middles of steps; each spike adds a Gaussian that integrates to 1 in the window.
void add_gaussians(Train train, const Window& window, double sigma, double step,
                   std::span<double> rates) {
  const auto count = static_cast<double>(rates.size());
  for (const double time : train) {
    const double place = (time - window.begin_ms) / step - 0.5, reach = 5.0 * sigma / step;
    const auto first = static_cast<std::size_t>(std::max(0.0, std::ceil(place - reach)));
    const double last = std::min(count - 1.0, std::floor(place + reach));
    const auto tail = [&](double edge) { return std::erf(edge / (sigma * std::numbers::sqrt2)); };
    const double inside = 0.5 * (tail(std::min(window.end_ms - time, 5.0 * sigma)) -
                                 tail(std::max(window.begin_ms - time, -5.0 * sigma)));
    const double height = 1.0 / (inside * sigma * std::sqrt(2.0 * std::numbers::pi));
    for (std::size_t bin = first; static_cast<double>(bin) <= last; ++bin) {
      const double gap = (static_cast<double>(bin) - place) * step / sigma;
      rates[bin] += height * std::exp(-0.5 * gap * gap);
    }
  }
}

double variance(const Eigen::VectorXd& values) {
  return (values.array() - values.mean()).square().mean();
}

}  // namespace

std::vector<double> RateTable::mean() const {
  std::vector<double> sums(bins, 0.0);
  for (std::size_t i = 0; i < trials; ++i) {
    for (std::size_t k = 0; k < bins; ++k) {
      sums[k] += rates[i * bins + k] / static_cast<double>(trials);
    }
  }
  return sums;
}

std::vector<double> RateTable::standard_error() const {
  if (trials < 2) {
    throw Error("", "rate over time", "a standard error needs at least 2 trials");
  }
  const std::vector<double> centre = mean();
  std::vector<double> errors(bins, 0.0);
  for (std::size_t i = 0; i < trials; ++i) {
    for (std::size_t k = 0; k < bins; ++k) {
      const double gap = rates[i * bins + k] - centre[k];
      errors[k] += gap * gap;
    }
  }
  const auto n = static_cast<double>(trials);
  for (double& error : errors) {
    error = std::sqrt(error / (n * (n - 1.0)));
  }
  return errors;
}

RateTable rate_table(const TrialSet& set, const PsthSettings& settings) {
  check_trials(set, "set");
  check(settings, set.window);
  const bool bins = settings.kind == PsthSettings::Kind::bins;
  RateTable table;
  table.trials = set.size();
  table.begin_ms = set.window.begin_ms;
  table.step_ms = bins ? settings.width_ms : settings.step_ms;
  table.bins = static_cast<std::size_t>(set.window.length_ms() / table.step_ms + 1e-9);
  table.rates.assign(table.trials * table.bins, 0.0);
  for (std::size_t i = 0; i < table.trials; ++i) {
    const std::span<double> row(table.rates.data() + i * table.bins, table.bins);
    if (bins) {
      add_bins(set.trains_ms[i], table.begin_ms, table.step_ms, row);
    } else {
      add_gaussians(set.trains_ms[i], set.window, settings.width_ms, table.step_ms, row);
    }
  }
  return table;
}

std::string describe(const PsthSettings& settings) {
  char text[60];
  std::snprintf(
      text, sizeof text,
      settings.kind == PsthSettings::Kind::bins ? "bins of %g ms" : "Gaussian, sigma %g ms",
      settings.width_ms);
  return text;
}

ExplainedVariance explained_variance(const RateTable& cell, std::span<const double> model_rate) {
  if (cell.trials < 2) {
    throw Error("", "explained variance", "it needs at least 2 repeats of the cell");
  }
  if (model_rate.size() != cell.bins || cell.bins == 0) {
    throw Error("", "explained variance", "the model's rate is not on the grid of the cell's");
  }
  const auto n = static_cast<double>(cell.trials);
  const auto trials = as_matrix(cell);
  const Eigen::Map<const Eigen::VectorXd> model(model_rate.data(),
                                                static_cast<Eigen::Index>(model_rate.size()));
  const Eigen::VectorXd psth = trials.colwise().mean();
  double trial_power = 0.0;
  for (Eigen::Index i = 0; i < trials.rows(); ++i) {
    trial_power += variance(trials.row(i)) / n;
  }
  const double power = variance(psth), model_power = variance(model);
  const double residual = variance(psth - model);
  const double covariance = ((psth.array() - psth.mean()) * (model.array() - model.mean())).mean();
  ExplainedVariance result;
  result.signal_power = (n * power - trial_power) / (n - 1.0);
  result.noise_power = trial_power - result.signal_power;
  if (power > 0.0) {
    result.plain = 1.0 - residual / power;
    if (model_power > 0.0) {
      result.correlation = covariance / std::sqrt(power * model_power);
    }
  }
  if (!(result.signal_power > 0.0)) {
    result.absence = "the repeats carry no reproducible rate (signal power is not positive)";
    return result;
  }
  result.explained = (power - residual) / result.signal_power;
  result.ceiling = std::sqrt(result.signal_power / power);
  if (model_power > 0.0) {
    result.normalised_correlation = covariance / std::sqrt(model_power * result.signal_power);
  }
  return result;
}

PairTable covariance_table(const RateTable& cell, const RateTable& model) {
  if (cell.bins != model.bins || cell.bins == 0) {
    throw Error("", "explained variance", "the model's rate is not on the grid of the cell's");
  }
  const auto centred = [](const RateTable& table) {
    RowMatrix rates = as_matrix(table);
    rates.colwise() -= rates.rowwise().mean().eval();
    return rates;
  };
  const RowMatrix a = centred(cell), b = centred(model);
  const auto products = [&](const RowMatrix& x, const RowMatrix& y) {
    const RowMatrix c = x * y.transpose() / static_cast<double>(cell.bins);
    return PairMatrix{static_cast<std::size_t>(c.rows()), static_cast<std::size_t>(c.cols()),
                      std::vector<double>(c.data(), c.data() + c.size())};
  };
  return {products(a, a), products(a, b), products(b, b)};
}

}  // namespace softsill::metrics

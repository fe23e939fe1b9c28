#include "estimator/fit/voltage_likelihood.hpp"

#include <algorithm>
#include <cmath>
#include <memory>
#include <numbers>

#include "estimator/fit/parallel.hpp"
#include "estimator/fit/row_sums.hpp"
#include "softsill/error.hpp"

namespace softsill {
namespace {

constexpr std::size_t rows_per_pass = 256;

VoltageStatistics::Block empty_block(Eigen::Index n) {
  return {Matrix::Zero(n, n), Matrix::Zero(n, n), Matrix::Zero(n, n), 0.0, 0.0};
}

/// Times at which one sweep's potential is read, as runs of neighbours inside one time block.
struct Run {
  std::size_t first_sample = 0, count = 0;
  bool starts_segment = false;  ///< no neighbour before it
  int block = 0;
};

/// Samples every `stride`, outside masks, inside the analysed windows after `ready`.
std::vector<Run> runs_of(const Sweep& sweep, double ready_ms, std::size_t stride,
                         const Variant& variant, double block_ms, int first_block) {
  std::vector<Run> runs;
  const double step = sweep.step_ms;
  std::size_t spike = 0;
  const std::vector<double>& spikes = sweep.spikes_ms;
  for (const Interval& window : sweep.analysed) {
    const double begin = std::max(window.begin_ms, ready_ms);
    const double first = std::ceil((begin - sweep.start_ms) / step - 1e-9);
    bool joined = false;
    for (auto sample = static_cast<std::size_t>(std::max(first, 0.0));
         sample < sweep.voltage_mV.size(); sample += stride) {
      const double t = sweep.start_ms + step * static_cast<double>(sample);
      if (t >= window.end_ms) {
        break;
      }
      while (spike < spikes.size() && spikes[spike] + variant.mask_after_ms <= t) {
        ++spike;
      }
      if (spike < spikes.size() && t > spikes[spike] - variant.mask_before_ms) {
        joined = false;
        continue;
      }
      const int block = first_block + static_cast<int>((t - sweep.start_ms) / block_ms);
      if (!joined || runs.back().block != block) {
        runs.push_back({sample, 0, !joined, block});
      }
      ++runs.back().count;
      joined = true;
    }
  }
  return runs;
}

/// Squares of neighbouring means and differences, gathered in packed form.
struct PairSums {
  explicit PairSums(std::size_t columns)
      : width(padded_width(columns)),
        mean(width * width, 0.0),
        difference(width * width, 0.0),
        rows(rows_per_pass * width),
        scratch(rows_per_pass * width),
        ones(rows_per_pass, 1.0) {}

  /// z: packed rows, pairs + 1 of them.
  void add(const double* z, std::size_t pairs) {
    for (std::size_t first = 0; first < pairs; first += rows_per_pass) {
      const std::size_t count = std::min(rows_per_pass, pairs - first);
      const double* low = z + first * width;
      const double* high = low + width;
      for (std::size_t k = 0; k < count * width; ++k) {
        rows[k] = 0.5 * (low[k] + high[k]);
      }
      add_squares(rows.data(), ones.data(), count, width, scratch.data(), mean.data());
      for (std::size_t k = 0; k < count * width; ++k) {
        rows[k] = high[k] - low[k];
      }
      add_squares(rows.data(), ones.data(), count, width, scratch.data(), difference.data());
    }
  }

  std::size_t width;
  std::vector<double> mean, difference, rows, scratch, ones;
};

/// Adds packed z of one run; `has_before` when row first - 1 is the last of the run it continues.
void add_run(const double* z, std::size_t first, const Run& run, bool has_before,
             VoltageStatistics::Block& block, PairSums& sums) {
  const Eigen::Index n = block.ends.rows();
  const std::size_t begin = has_before ? first - 1 : first;
  const std::size_t pairs = run.count - 1 + (has_before ? 1 : 0);
  sums.add(z + begin * sums.width, pairs);
  const Eigen::Map<const Vector> head(z + begin * sums.width, n);
  const Eigen::Map<const Vector> tail(z + (first + run.count - 1) * sums.width, n);
  if (!has_before) {
    block.ends.noalias() += head * head.transpose();
  }
  block.ends.noalias() += 0.5 * (tail * tail.transpose() - head * head.transpose());
  block.pairs += static_cast<double>(pairs);
  block.samples += static_cast<double>(run.count);
}

/// The packed lower triangle as a complete symmetric matrix.
Matrix completed(const std::vector<double>& square, std::size_t width, Eigen::Index n) {
  const Eigen::Map<const RowMatrix> packed(square.data(), static_cast<Eigen::Index>(width),
                                           static_cast<Eigen::Index>(width));
  return Matrix(packed.topLeftCorner(n, n)).selfadjointView<Eigen::Lower>();
}

/// The quadratic form's matrix for one rho: ends + (1-rho)/(1+rho) mean + (1+rho)/(4(1-rho)) diff.
Matrix combined(const VoltageStatistics::Block& block, double atanh_rho) {
  return block.ends + std::exp(-2.0 * atanh_rho) * block.mean +
         0.25 * std::exp(2.0 * atanh_rho) * block.difference;
}

/// (-v, 1)
Vector residual_weights(const Vector& v) {
  Vector a(v.size() + 1);
  a << -v, 1.0;
  return a;
}

/// The potential without the drop over the resistance that the user told us of.
double corrected_mV(const Sweep& sweep, std::size_t sample, const SeriesResistance& resistance) {
  const double drop = resistance.fit ? 0.0 : resistance.value_MOhm * sweep.input[sample];
  return sweep.voltage_mV[sample] - drop;
}

double log_cosh(double z) {
  const double a = std::abs(z);
  return a + std::log1p(std::exp(-2.0 * a)) - std::numbers::ln2;
}

}  // namespace

VoltageStatistics gather_voltage(const Columns& columns, const Exposure& exposure,
                                 const Recording& recording, const Variant& variant,
                                 double lead_in_ms, double block_ms, int threads) {
  const auto n = static_cast<Eigen::Index>(columns.width) + 1;
  VoltageStatistics statistics;
  double sum = 0.0, samples = 0.0;
  struct Piece {
    const SweepExposure* part;
    std::shared_ptr<const RowFiller> filler;
    std::vector<Run> runs;
    std::size_t stride;
  };
  std::vector<Piece> pieces;
  int blocks = 0;
  for (const SweepExposure& part : exposure.sweeps) {
    const Sweep& sweep = *part.sweep;
    if (!sweep.has_voltage()) {
      continue;
    }
    const auto stride = static_cast<std::size_t>(
        std::max(1.0, std::round(variant.voltage_step_ms / sweep.step_ms)));
    const double step = sweep.step_ms * static_cast<double>(stride);
    if (statistics.step_ms == 0.0) {
      statistics.step_ms = step;
    } else if (std::abs(statistics.step_ms - step) > 1e-6 * step) {
      throw Error("", "sweep " + sweep.name,
                  "is sampled so that its potential cannot be read every " +
                      std::to_string(statistics.step_ms) + " ms like the other sweeps'",
                  "choose a voltage step that is a whole number of samples in every sweep");
    }
    const std::vector<Run> runs =
        runs_of(sweep, sweep.start_ms + lead_in_ms, stride, variant, block_ms, blocks);
    for (const Run& run : runs) {
      for (std::size_t i = 0; i < run.count; ++i) {
        sum += corrected_mV(sweep, run.first_sample + i * stride, recording.series_resistance);
      }
      samples += static_cast<double>(run.count);
    }
    const auto filler =
        std::make_shared<const RowFiller>(columns, part, padded_width(static_cast<std::size_t>(n)));
    // One piece of work per time block, led by whether its first run continues the one before.
    for (std::size_t i = 0; i < runs.size();) {
      std::size_t end = i;
      while (end < runs.size() && runs[end].block == runs[i].block) {
        ++end;
      }
      pieces.push_back({&part,
                        filler,
                        {runs.begin() + static_cast<std::ptrdiff_t>(i),
                         runs.begin() + static_cast<std::ptrdiff_t>(end)},
                        stride});
      i = end;
    }
    blocks += static_cast<int>(sweep.duration_ms() / block_ms) + 1;
  }
  if (samples < 10.0 * static_cast<double>(n)) {
    throw Error("", recording.cell, "too little of the potential is left outside the spikes' masks",
                "shorten mask_before_ms and mask_after_ms, or fit the spikes alone");
  }
  statistics.reference_mV = sum / samples;
  statistics.blocks.assign(static_cast<std::size_t>(blocks), empty_block(n));
  parallel_for(threads, pieces.size(), [&](std::size_t index) {
    const Piece& piece = pieces[index];
    const Sweep& sweep = *piece.part->sweep;
    std::vector<double> times;
    std::vector<double> voltage;
    auto take = [&](std::size_t sample) {
      times.push_back(sweep.start_ms + sweep.step_ms * static_cast<double>(sample));
      voltage.push_back(corrected_mV(sweep, sample, recording.series_resistance) -
                        statistics.reference_mV);
    };
    const bool continues = !piece.runs.front().starts_segment;
    if (continues) {
      take(piece.runs.front().first_sample - piece.stride);
    }
    for (const Run& run : piece.runs) {
      for (std::size_t i = 0; i < run.count; ++i) {
        take(run.first_sample + i * piece.stride);
      }
    }
    PairSums sums(static_cast<std::size_t>(n));
    std::vector<double> z(times.size() * sums.width, 0.0);
    piece.filler->fill(times, z.data());
    for (std::size_t i = 0; i < times.size(); ++i) {
      z[i * sums.width + static_cast<std::size_t>(n) - 1] = voltage[i];
    }
    VoltageStatistics::Block& block =
        statistics.blocks[static_cast<std::size_t>(piece.runs.front().block)];
    std::size_t row = continues ? 1 : 0;
    for (const Run& run : piece.runs) {
      add_run(z.data(), row, run, !run.starts_segment, block, sums);
      row += run.count;
    }
    block.mean = completed(sums.mean, sums.width, n);
    block.difference = completed(sums.difference, sums.width, n);
  });
  statistics.total = empty_block(n);
  for (const VoltageStatistics::Block& block : statistics.blocks) {
    statistics.total.mean += block.mean;
    statistics.total.difference += block.difference;
    statistics.total.ends += block.ends;
    statistics.total.pairs += block.pairs;
    statistics.total.samples += block.samples;
  }
  statistics.used_ms = statistics.total.samples * statistics.step_ms;
  return statistics;
}

VoltageEvaluation evaluate_voltage(const VoltageStatistics& statistics, const Vector& v,
                                   double log_sigma, double atanh_rho) {
  const VoltageStatistics::Block& s = statistics.total;
  const Eigen::Index p = v.size();
  const Vector a = residual_weights(v);
  const double down = std::exp(-2.0 * atanh_rho), up = 0.25 * std::exp(2.0 * atanh_rho);
  const double precision = std::exp(-2.0 * log_sigma);
  const Vector mean_a = s.mean * a, difference_a = s.difference * a, ends_a = s.ends * a;
  const double q_mean = down * a.dot(mean_a), q_difference = up * a.dot(difference_a);
  const double q = a.dot(ends_a) + q_mean + q_difference;
  const double q_z = -2.0 * q_mean + 2.0 * q_difference;
  const double q_zz = 4.0 * q_mean + 4.0 * q_difference;
  const double tanh_z = std::tanh(atanh_rho);
  const double sech2 = 1.0 - tanh_z * tanh_z;

  VoltageEvaluation out;
  out.log_likelihood =
      -0.5 * (s.samples * std::log(2.0 * std::numbers::pi) + 2.0 * s.samples * log_sigma -
              2.0 * s.pairs * log_cosh(atanh_rho) + precision * q);
  if (!std::isfinite(out.log_likelihood)) {
    out.log_likelihood = -std::numeric_limits<double>::infinity();
  }
  const Vector force = (ends_a + down * mean_a + up * difference_a).head(p);
  const Vector force_z = (-2.0 * down * mean_a + 2.0 * up * difference_a).head(p);
  out.gradient.resize(p + 2);
  out.gradient << precision * force, -s.samples + precision * q,
      s.pairs * tanh_z - 0.5 * precision * q_z;
  out.information = Matrix::Zero(p + 2, p + 2);
  out.information.topLeftCorner(p, p) = precision * combined(s, atanh_rho).topLeftCorner(p, p);
  out.information.col(p).head(p) = 2.0 * precision * force;
  out.information.col(p + 1).head(p) = -precision * force_z;
  out.information(p, p) = 2.0 * precision * q;
  out.information(p + 1, p + 1) = 0.5 * precision * q_zz - s.pairs * sech2;
  out.information.row(p) = out.information.col(p).transpose();
  out.information.row(p + 1) = out.information.col(p + 1).transpose();
  out.information(p, p + 1) = out.information(p + 1, p) = -precision * q_z;
  // At the truth q = samples, q_z = 2 pairs tanh, q_zz = 4 (...): (log sigma, atanh rho) have
  // expected information [2N, -2 P t; ., P (1 + t^2)].
  out.expected = Matrix::Zero(p + 2, p + 2);
  out.expected.topLeftCorner(p, p) = out.information.topLeftCorner(p, p);
  out.expected(p, p) = 2.0 * s.samples;
  out.expected(p, p + 1) = out.expected(p + 1, p) = -2.0 * s.pairs * tanh_z;
  out.expected(p + 1, p + 1) = s.pairs * (1.0 + tanh_z * tanh_z);
  return out;
}

Matrix block_scores(const VoltageStatistics& statistics, const Vector& v, double log_sigma,
                    double atanh_rho) {
  const Eigen::Index p = v.size();
  const Vector a = residual_weights(v);
  const double down = std::exp(-2.0 * atanh_rho), up = 0.25 * std::exp(2.0 * atanh_rho);
  const double precision = std::exp(-2.0 * log_sigma), tanh_z = std::tanh(atanh_rho);
  Matrix scores(static_cast<Eigen::Index>(statistics.blocks.size()), p + 2);
  for (Eigen::Index i = 0; i < scores.rows(); ++i) {
    const VoltageStatistics::Block& s = statistics.blocks[static_cast<std::size_t>(i)];
    const double q_mean = down * a.dot(s.mean * a), q_difference = up * a.dot(s.difference * a);
    const double q = a.dot(s.ends * a) + q_mean + q_difference;
    scores.row(i).head(p) = precision * (combined(s, atanh_rho) * a).head(p).transpose();
    scores(i, p) = -s.samples + precision * q;
    scores(i, p + 1) = s.pairs * tanh_z - precision * (q_difference - q_mean);
  }
  return scores;
}

void hold_derivative_columns(const Columns& columns, const VoltageStatistics& statistics,
                             Matrix& penalty) {
  for (const ColumnBlock& block : columns.blocks) {
    for (std::size_t j = block.functions(); j < block.width(); ++j) {
      const auto at = static_cast<Eigen::Index>(block.first + j);
      penalty(at, at) = 1e12 * (1.0 + statistics.total.mean(at, at));
    }
  }
}

VoltageFit fit_voltage(const VoltageStatistics& statistics, const Matrix& penalty) {
  const VoltageStatistics::Block& s = statistics.total;
  const Eigen::Index p = s.mean.rows() - 1;
  VoltageFit fit;
  fit.v = Vector::Zero(p);
  fit.atanh_rho = 1.0;
  // Generalised least squares for v given rho, then rho and sigma given v; each step maximises.
  for (int round = 0; round < 50; ++round) {
    const Matrix form = combined(s, fit.atanh_rho);
    const double precision = std::exp(-2.0 * fit.log_sigma);
    fit.information = (round == 0 ? 1.0 : precision) * form.topLeftCorner(p, p) + penalty;
    fit.v = fit.information.ldlt().solve((round == 0 ? 1.0 : precision) * form.col(p).head(p));
    const Vector a = residual_weights(fit.v);
    const double m = a.dot(s.mean * a), d = a.dot(s.difference * a), e = a.dot(s.ends * a);
    const double before = fit.atanh_rho;
    // Newton on the profile over sigma: samples log q(z) - 2 pairs log cosh z.
    double z = fit.atanh_rho;
    for (int step = 0; step < 100; ++step) {
      const double qm = std::exp(-2.0 * z) * m, qd = 0.25 * std::exp(2.0 * z) * d;
      const double q = e + qm + qd, q1 = 2.0 * (qd - qm), q2 = 4.0 * (qd + qm);
      const double t = std::tanh(z);
      const double g = s.samples * q1 / q - 2.0 * s.pairs * t;
      double h = s.samples * (q2 / q - q1 * q1 / (q * q)) - 2.0 * s.pairs * (1.0 - t * t);
      if (h <= 0.0) {
        h = s.samples * q2 / q;
      }
      const double move = std::clamp(g / h, -0.5, 0.5);
      z -= move;
      if (std::abs(move) < 1e-12) {
        break;
      }
    }
    fit.atanh_rho = z;
    fit.log_sigma =
        0.5 * std::log((e + std::exp(-2.0 * z) * m + 0.25 * std::exp(2.0 * z) * d) / s.samples);
    if (std::abs(fit.atanh_rho - before) < 1e-9 && round > 2) {
      break;
    }
  }
  return fit;
}

}  // namespace softsill

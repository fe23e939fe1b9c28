#include "estimator/fit/columns.hpp"

#include <algorithm>
#include <cmath>

#include "estimator/fit/parallel.hpp"
#include "softsill/error.hpp"

namespace softsill {
namespace {

constexpr std::size_t rows_per_piece = 8192;
constexpr double checkpoint_ms = 500.0;

/// Copies an n x width row-major block into the wider rows of `out`.
void place(const std::vector<double>& from, std::size_t width, std::size_t first,
           std::size_t row_width, double* out) {
  const std::size_t rows = from.size() / std::max<std::size_t>(width, 1);
  for (std::size_t i = 0; i < rows; ++i) {
    std::copy_n(from.data() + i * width, width, out + i * row_width + first);
  }
}

}  // namespace

std::size_t ColumnBlock::functions() const {
  return kind == Kind::one || kind == Kind::current ? 1 : basis.size();
}

std::size_t ColumnBlock::width() const { return functions() * (derivatives ? 3 : 1); }

void Columns::add(ColumnBlock block) {
  block.first = width;
  width += block.width();
  blocks.push_back(std::move(block));
}

RowFiller::RowFiller(const Columns& columns, const SweepExposure& exposure, std::size_t stride)
    : columns_(columns),
      exposure_(exposure),
      stride_(stride == 0 ? columns.width : stride),
      checkpoints_(columns.blocks.size()) {
  const Sweep& sweep = *exposure.sweep;
  const auto every = static_cast<std::size_t>(std::max(1.0, checkpoint_ms / sweep.step_ms));
  for (std::size_t i = 0; i < columns.blocks.size(); ++i) {
    const ColumnBlock& block = columns.blocks[i];
    if (block.kind == ColumnBlock::Kind::input) {
      for (double tau : block.basis.time_constants_ms) {
        checkpoints_[i].push_back(input_exponential_checkpoints(tau, sweep.input, sweep.step_ms,
                                                                exposure.before_value, every));
      }
    }
  }
}

/// exp(-s / tau) and its first two derivatives by log tau, (s / tau) e and
/// ((s / tau)^2 - s / tau) e, from the moments s^r e.
void RowFiller::fill_exponentials(const ColumnBlock& block, std::span<const double> times_ms,
                                  double* out) const {
  const Sweep& sweep = *exposure_.sweep;
  const std::size_t n = block.basis.size();
  const int orders = block.derivatives ? 3 : 1;
  const auto index = static_cast<std::size_t>(&block - columns_.blocks.data());
  std::vector<double> moments(times_ms.size() * static_cast<std::size_t>(orders));
  for (std::size_t k = 0; k < n; ++k) {
    const double tau = block.basis.time_constants_ms[k];
    if (block.kind == ColumnBlock::Kind::input) {
      input_exponential_moments(tau, orders, sweep.input, sweep.start_ms, sweep.step_ms,
                                exposure_.before_value, times_ms, moments, &checkpoints_[index][k]);
    } else {
      history_exponential_moments(tau, orders, sweep.spikes_ms, times_ms, moments);
    }
    for (std::size_t i = 0; i < times_ms.size(); ++i) {
      const double* m = moments.data() + static_cast<std::size_t>(orders) * i;
      double* row = out + i * stride_ + block.first;
      row[k] = m[0];
      if (block.derivatives) {
        row[n + k] = m[1] / tau;
        row[2 * n + k] = m[2] / (tau * tau) - m[1] / tau;
      }
    }
  }
}

void RowFiller::fill(std::span<const double> times_ms, double* out) const {
  const Sweep& sweep = *exposure_.sweep;
  std::vector<double> buffer;
  for (const ColumnBlock& block : columns_.blocks) {
    if (block.width() == 0) {
      continue;
    }
    if (block.kind == ColumnBlock::Kind::one) {
      for (std::size_t i = 0; i < times_ms.size(); ++i) {
        out[i * stride_ + block.first] = 1.0;
      }
      continue;
    }
    if (block.kind == ColumnBlock::Kind::current) {
      const double last = static_cast<double>(sweep.input.size()) - 1.0;
      for (std::size_t i = 0; i < times_ms.size(); ++i) {
        // Half a rounding error must not pick the sample before.
        const double position = (times_ms[i] - sweep.start_ms) / sweep.step_ms + 1e-6;
        out[i * stride_ + block.first] =
            sweep.input[static_cast<std::size_t>(std::clamp(std::floor(position), 0.0, last))];
      }
      continue;
    }
    if (block.basis.family == KernelFamily::exponentials) {
      fill_exponentials(block, times_ms, out);
      continue;
    }
    buffer.assign(times_ms.size() * block.width(), 0.0);
    if (block.kind == ColumnBlock::Kind::input) {
      input_responses(block.basis, sweep.input, sweep.start_ms, sweep.step_ms,
                      exposure_.before_value, times_ms, buffer);
    } else {
      history_responses(block.basis, sweep.spikes_ms, times_ms, buffer);
    }
    place(buffer, block.width(), block.first, stride_, out);
  }
}

void RowFiller::fill(std::span<const double> times_ms, double* out, int threads) const {
  const std::size_t pieces = (times_ms.size() + rows_per_piece - 1) / rows_per_piece;
  parallel_for(threads, pieces, [&](std::size_t piece) {
    const std::size_t first = piece * rows_per_piece;
    const std::size_t count = std::min(rows_per_piece, times_ms.size() - first);
    fill(times_ms.subspan(first, count), out + first * stride_);
  });
}

}  // namespace softsill

#include "estimator/fit/spike_likelihood.hpp"

#include <cmath>
#include <limits>

#include "estimator/fit/parallel.hpp"

namespace softsill {
namespace {

constexpr Eigen::Index rows_per_pass = 256;    // a pass stays in the first-level caches
constexpr Eigen::Index passes_per_piece = 16;  // pieces are what threads take

/// What one row adds: the term itself, its derivatives by (x, log lambda_0, log n), and the same of
/// the negative expected information, all for the log-likelihood.
struct Term {
  double value = 0.0;
  double x = 0.0, l = 0.0, n = 0.0;
  double xx = 0.0, xl = 0.0, xn = 0.0, ll = 0.0, ln = 0.0, nn = 0.0;
  double expected_xx = 0.0, expected_xl = 0.0, expected_xn = 0.0;
  double expected_ll = 0.0, expected_ln = 0.0, expected_nn = 0.0;
};

/// -w lambda, with the information of the events it predicts: w (d lambda)(d lambda)^T / lambda.
Term node_term(const EscapeDerivatives& e, double w) {
  Term t;
  t.value = -w * e.rate;
  t.x = -w * e.rate_x;
  t.l = -w * e.rate;
  t.n = -w * e.rate_n;
  t.xx = -w * e.rate_xx;
  t.xl = -w * e.rate_x;
  t.xn = -w * e.rate_xn;
  t.ll = -w * e.rate;
  t.ln = -w * e.rate_n;
  t.nn = -w * e.rate_nn;
  // d lambda = lambda d log lambda keeps this finite where lambda underflows.
  const double m = w * e.rate;
  t.expected_xx = m * e.log_x * e.log_x;
  t.expected_xl = m * e.log_x;
  t.expected_xn = m * e.log_x * e.log_n;
  t.expected_ll = m;
  t.expected_ln = m * e.log_n;
  t.expected_nn = m * e.log_n * e.log_n;
  return t;
}

/// log lambda at a spike.
Term spike_term(const EscapeDerivatives& e) {
  Term t;
  t.value = e.log;
  t.x = e.log_x;
  t.l = 1.0;
  t.n = e.log_n;
  t.xx = e.log_xx;
  t.xn = e.log_xn;
  t.nn = e.log_nn;
  return t;
}

/// log(1 - exp(-w lambda)) for a bin with a spike. With m = w lambda and r = 1 / (e^m - 1):
/// d = r dm, d2 = r d2m + r' dm dm, r' = -e^m / (e^m - 1)^2.
Term bin_term(const EscapeDerivatives& e, double w) {
  Term t;
  const double m = w * e.rate;
  const double r = 1.0 / std::expm1(m);
  const double r1 = -r * (1.0 + r);
  const double mx = w * e.rate_x, mn = w * e.rate_n;
  t.value = m > 1e-30 ? std::log(-std::expm1(-m)) : std::log(w) + e.log;
  t.x = r * mx;
  t.l = r * m;
  t.n = r * mn;
  t.xx = r * w * e.rate_xx + r1 * mx * mx;
  t.xl = r * mx + r1 * mx * m;
  t.xn = r * w * e.rate_xn + r1 * mx * mn;
  t.ll = r * m + r1 * m * m;
  t.ln = r * mn + r1 * m * mn;
  t.nn = r * w * e.rate_nn + r1 * mn * mn;
  return t;
}

/// Expected information of a bin, spike or none: (dm)(dm)^T / (e^m - 1).
void expect_bin(Term& t, const EscapeDerivatives& e, double w) {
  const double m = w * e.rate;
  const double r = m > 0.0 ? m * m / std::expm1(m) : 0.0;
  t.expected_xx = r * e.log_x * e.log_x;
  t.expected_xl = r * e.log_x;
  t.expected_xn = r * e.log_x * e.log_n;
  t.expected_ll = r;
  t.expected_ln = r * e.log_n;
  t.expected_nn = r * e.log_n * e.log_n;
}

/// Sums over rows, in the coordinates (beta, log lambda_0, log n).
class Sums {
 public:
  Sums(Eigen::Index width, Want want) : width_(width), want_(want) {
    if (want != Want::value) {
      gradient = Vector::Zero(width + 2);
    }
    if (second_order()) {
      hessian = Matrix::Zero(width + 2, width + 2);
    }
    if (want == Want::derivatives_and_expected) {
      expected = Matrix::Zero(width + 2, width + 2);
    }
  }

  /// `rows` is n x width, `terms` n.
  void add(const Eigen::Ref<const RowMatrix>& rows, const std::vector<Term>& terms, bool own) {
    const Eigen::Index n = rows.rows();
    Vector x(n), xx(n), weight(n);
    for (Eigen::Index i = 0; i < n; ++i) {
      const Term& t = terms[static_cast<std::size_t>(i)];
      value += t.value;
      x[i] = t.x;
      xx[i] = t.xx;
    }
    if (want_ == Want::value) {
      return;
    }
    gradient.head(width_).noalias() += rows.transpose() * x;
    if (!second_order()) {
      if (own) {
        for (const Term& t : terms) {
          gradient[width_] += t.l;
          gradient[width_ + 1] += t.n;
        }
      }
      return;
    }
    add_square(rows, xx, hessian);
    if (want_ == Want::derivatives_and_expected) {
      for (Eigen::Index i = 0; i < n; ++i) {
        weight[i] = terms[static_cast<std::size_t>(i)].expected_xx;
      }
      add_square(rows, weight, expected);
    }
    if (own) {
      add_own(rows, terms);
    }
  }

  void add(const Sums& other) {
    value += other.value;
    if (want_ != Want::value) {
      gradient += other.gradient;
    }
    if (second_order()) {
      hessian += other.hessian;
    }
    if (want_ == Want::derivatives_and_expected) {
      expected += other.expected;
    }
  }

  double value = 0.0;
  Vector gradient;
  Matrix hessian, expected;  ///< lower triangles are right

 private:
  bool second_order() const {
    return want_ == Want::derivatives || want_ == Want::derivatives_and_expected;
  }

  /// out += rows^T diag(weight) rows, lower triangle.
  void add_square(const Eigen::Ref<const RowMatrix>& rows, const Vector& weight, Matrix& out) {
    scaled_ = rows;
    scaled_.array().colwise() *= weight.array();
    auto square = out.topLeftCorner(width_, width_);
    square.triangularView<Eigen::Lower>() += rows.transpose() * scaled_;
  }

  void add_own(const Eigen::Ref<const RowMatrix>& rows, const std::vector<Term>& terms) {
    const Eigen::Index l = width_, n = width_ + 1;
    for (Eigen::Index i = 0; i < rows.rows(); ++i) {
      const Term& t = terms[static_cast<std::size_t>(i)];
      gradient[l] += t.l;
      gradient[n] += t.n;
      hessian.row(l).head(width_) += t.xl * rows.row(i);
      hessian.row(n).head(width_) += t.xn * rows.row(i);
      hessian(l, l) += t.ll;
      hessian(n, l) += t.ln;
      hessian(n, n) += t.nn;
      if (want_ == Want::derivatives_and_expected) {
        expected.row(l).head(width_) += t.expected_xl * rows.row(i);
        expected.row(n).head(width_) += t.expected_xn * rows.row(i);
        expected(l, l) += t.expected_ll;
        expected(n, l) += t.expected_ln;
        expected(n, n) += t.expected_nn;
      }
    }
  }

  Eigen::Index width_;
  Want want_;
  RowMatrix scaled_;
};

template <typename MakeTerm>
void sum_rows(const RowMatrix& rows, Eigen::Index first, Eigen::Index end, const Escape& escape,
              const Vector& beta, MakeTerm&& make_term, Sums& sums) {
  std::vector<Term> terms;
  for (Eigen::Index row = first; row < end; row += rows_per_pass) {
    const Eigen::Index count = std::min(rows_per_pass, end - row);
    const auto part = rows.middleRows(row, count);
    const Vector x = part * beta;
    terms.resize(static_cast<std::size_t>(count));
    for (Eigen::Index i = 0; i < count; ++i) {
      terms[static_cast<std::size_t>(i)] = make_term(escape_at(escape, x[i]), row + i);
    }
    // The exponential has no own parameter to fit, and is the common case.
    sums.add(part, terms, escape.kind != EscapeKind::exponential);
  }
}

Term spike_row_term(const SpikeDesign& design, const EscapeDerivatives& e, Eigen::Index row) {
  if (design.spike_bins_ms.size() == 0) {
    return spike_term(e);
  }
  Term t = bin_term(e, design.spike_bins_ms[row]);
  expect_bin(t, e, design.spike_bins_ms[row]);
  return t;
}

Term node_row_term(const SpikeDesign& design, const EscapeDerivatives& e, Eigen::Index row) {
  Term t = node_term(e, design.weights_ms[row]);
  if (design.spike_bins_ms.size() != 0) {
    expect_bin(t, e, design.weights_ms[row]);
  }
  return t;
}

}  // namespace

SpikeEvaluation evaluate_spikes(const SpikeDesign& design, const Escape& escape, const Vector& beta,
                                Want want, int threads) {
  const Eigen::Index per_piece = rows_per_pass * passes_per_piece;
  const Eigen::Index node_pieces = (design.nodes.rows() + per_piece - 1) / per_piece;
  // The last piece is the spikes.
  std::vector<Sums> parts(static_cast<std::size_t>(node_pieces) + 1, Sums(design.width(), want));
  parallel_for(threads, parts.size(), [&](std::size_t piece) {
    const auto index = static_cast<Eigen::Index>(piece);
    if (index == node_pieces) {
      sum_rows(
          design.spikes, 0, design.spikes.rows(), escape, beta,
          [&](const EscapeDerivatives& e, Eigen::Index row) {
            return spike_row_term(design, e, row);
          },
          parts[piece]);
      return;
    }
    const Eigen::Index end = std::min(design.nodes.rows(), (index + 1) * per_piece);
    sum_rows(
        design.nodes, index * per_piece, end, escape, beta,
        [&](const EscapeDerivatives& e, Eigen::Index row) { return node_row_term(design, e, row); },
        parts[piece]);
  });
  Sums total(design.width(), want);
  for (const Sums& part : parts) {
    total.add(part);
  }
  SpikeEvaluation out;
  out.log_likelihood =
      std::isfinite(total.value) ? total.value : -std::numeric_limits<double>::infinity();
  if (want != Want::value) {
    out.gradient = std::move(total.gradient);
  }
  if (want == Want::derivatives || want == Want::derivatives_and_expected) {
    out.information = -Matrix(total.hessian.selfadjointView<Eigen::Lower>());
  }
  if (want == Want::derivatives_and_expected) {
    out.expected = total.expected.selfadjointView<Eigen::Lower>();
  }
  return out;
}

Matrix block_scores(const SpikeDesign& design, const Escape& escape, const Vector& beta) {
  const Eigen::Index width = design.width();
  Matrix scores = Matrix::Zero(design.blocks, width + 2);
  auto add = [&](const RowMatrix& rows, const std::vector<int>& blocks, auto&& make_term) {
    const Vector x = rows * beta;
    for (Eigen::Index i = 0; i < rows.rows(); ++i) {
      const Term t = make_term(escape_at(escape, x[i]), i);
      const int block = blocks[static_cast<std::size_t>(i)];
      scores.row(block).head(width) += t.x * rows.row(i);
      scores(block, width) += t.l;
      scores(block, width + 1) += t.n;
    }
  };
  add(design.nodes, design.node_blocks,
      [&](const EscapeDerivatives& e, Eigen::Index row) { return node_row_term(design, e, row); });
  add(design.spikes, design.spike_blocks,
      [&](const EscapeDerivatives& e, Eigen::Index row) { return spike_row_term(design, e, row); });
  return scores;
}

}  // namespace softsill

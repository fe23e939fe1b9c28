#include "estimator/fit/spike_likelihood.hpp"

#include <cmath>
#include <limits>

#include "estimator/fit/parallel.hpp"
#include "estimator/fit/row_sums.hpp"

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

/// m / (e^m - 1) for m = w lambda: 1 where lambda underflows, 0 where it overflows.
double bin_share(double m) { return m < 1e-30 ? 1.0 : m < 700.0 ? m / std::expm1(m) : 0.0; }

/// log(1 - exp(-w lambda)) for a bin with a spike. With m = w lambda and q = m / (e^m - 1), in
/// derivatives of log lambda, which stay finite where lambda does not:
/// d = q dlog, d2 = q d2log + q (1 - q - m) dlog dlog.
Term bin_term(const EscapeDerivatives& e, double w) {
  Term t;
  const double m = w * e.rate;
  const double q = bin_share(m);
  // The difference by its series where it would cancel.
  const double q1 = q == 0.0 ? 0.0 : q * (m < 1e-3 ? -m * (0.5 + m / 12.0) : 1.0 - q - m);
  t.value = m > 1e-30 ? std::log(-std::expm1(-m)) : std::log(w) + e.log;
  t.x = q * e.log_x;
  t.l = q;
  t.n = q * e.log_n;
  t.xx = q * e.log_xx + q1 * e.log_x * e.log_x;
  t.xl = q1 * e.log_x;
  t.xn = q * e.log_xn + q1 * e.log_x * e.log_n;
  t.ll = q1;
  t.ln = q1 * e.log_n;
  t.nn = q * e.log_nn + q1 * e.log_n * e.log_n;
  return t;
}

/// Expected information of a bin, spike or none: (dm)(dm)^T / (e^m - 1) = m q dlog dlog.
void expect_bin(Term& t, const EscapeDerivatives& e, double w) {
  const double m = w * e.rate;
  const double q = bin_share(m);
  const double r = q > 0.0 ? m * q : 0.0;
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
  Sums(Eigen::Index width, Want want)
      : width_(width), padded_(padded_width(static_cast<std::size_t>(width))), want_(want) {
    if (want != Want::value) {
      gradient = Vector::Zero(width + 2);
      sum_.assign(padded_, 0.0);
    }
    if (second_order()) {
      hessian = Matrix::Zero(width + 2, width + 2);
      square_.assign(padded_ * padded_, 0.0);
    }
    if (want == Want::derivatives_and_expected) {
      expected = Matrix::Zero(width + 2, width + 2);
      expected_square_.assign(padded_ * padded_, 0.0);
    }
  }

  std::size_t padded() const { return padded_; }

  /// `rows` are packed, terms.size() of them; `own` when the escape function has own parameters.
  void add(const double* rows, const std::vector<Term>& terms, bool own) {
    const std::size_t n = terms.size();
    for (const Term& t : terms) {
      value += t.value;
    }
    if (want_ == Want::value) {
      return;
    }
    weight_.resize(n);
    add_by(terms, &Term::x);
    add_rows(rows, weight_.data(), n, padded_, sum_.data());
    if (own) {
      add_own(rows, terms);
    }
    if (!second_order()) {
      return;
    }
    scratch_.resize(n * padded_);
    add_by(terms, &Term::xx);
    add_squares(rows, weight_.data(), n, padded_, scratch_.data(), square_.data());
    if (want_ == Want::derivatives_and_expected) {
      add_by(terms, &Term::expected_xx);
      add_squares(rows, weight_.data(), n, padded_, scratch_.data(), expected_square_.data());
    }
  }

  /// Moves the packed sums to where they are read.
  void finish() {
    if (want_ != Want::value) {
      gradient.head(width_) += Eigen::Map<const Vector>(sum_.data(), width_);
    }
    if (second_order()) {
      unpack(square_, hessian);
    }
    if (want_ == Want::derivatives_and_expected) {
      unpack(expected_square_, expected);
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

  void add_by(const std::vector<Term>& terms, double Term::*member) {
    for (std::size_t i = 0; i < terms.size(); ++i) {
      weight_[i] = terms[i].*member;
    }
  }

  void unpack(const std::vector<double>& square, Matrix& out) const {
    const Eigen::Map<const RowMatrix> packed(square.data(), static_cast<Eigen::Index>(padded_),
                                             static_cast<Eigen::Index>(padded_));
    out.topLeftCorner(width_, width_).triangularView<Eigen::Lower>() +=
        packed.topLeftCorner(width_, width_);
  }

  void add_own(const double* rows, const std::vector<Term>& terms) {
    const Eigen::Index l = width_, n = width_ + 1;
    for (std::size_t i = 0; i < terms.size(); ++i) {
      const Term& t = terms[i];
      gradient[l] += t.l;
      gradient[n] += t.n;
      if (!second_order()) {
        continue;
      }
      const Eigen::Map<const Eigen::RowVectorXd> row(rows + i * padded_, width_);
      hessian.row(l).head(width_) += t.xl * row;
      hessian.row(n).head(width_) += t.xn * row;
      hessian(l, l) += t.ll;
      hessian(n, l) += t.ln;
      hessian(n, n) += t.nn;
      if (want_ == Want::derivatives_and_expected) {
        expected.row(l).head(width_) += t.expected_xl * row;
        expected.row(n).head(width_) += t.expected_xn * row;
        expected(l, l) += t.expected_ll;
        expected(n, l) += t.expected_ln;
        expected(n, n) += t.expected_nn;
      }
    }
  }

  Eigen::Index width_;
  std::size_t padded_;
  Want want_;
  std::vector<double> sum_, square_, expected_square_, weight_, scratch_;
};

template <typename MakeTerm>
void sum_rows(const RowMatrix& rows, Eigen::Index first, Eigen::Index end, const Escape& escape,
              const Vector& beta, MakeTerm&& make_term, Sums& sums) {
  const auto columns = static_cast<std::size_t>(beta.size());
  const auto stride = static_cast<std::size_t>(rows.cols());
  const bool in_place = stride == sums.padded();
  std::vector<double> packed(in_place ? 0
                                      : static_cast<std::size_t>(rows_per_pass) * sums.padded());
  std::vector<double> x(static_cast<std::size_t>(rows_per_pass));
  std::vector<double> padded_beta(sums.padded(), 0.0);
  std::copy_n(beta.data(), columns, padded_beta.data());
  std::vector<Term> terms;
  for (Eigen::Index row = first; row < end; row += rows_per_pass) {
    const auto count = static_cast<std::size_t>(std::min(rows_per_pass, end - row));
    const double* pass = rows.data() + row * rows.cols();
    if (!in_place) {
      pack_rows(pass, count, columns, stride, sums.padded(), packed.data());
      pass = packed.data();
    }
    dot_rows(pass, count, sums.padded(), padded_beta.data(), x.data());
    terms.resize(count);
    for (std::size_t i = 0; i < count; ++i) {
      terms[i] = make_term(escape_at(escape, x[i]), row + static_cast<Eigen::Index>(i));
    }
    // The exponential has no own parameter to fit, and is the common case.
    sums.add(pass, terms, escape.kind != EscapeKind::exponential);
  }
  sums.finish();
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

Vector predictor(const RowMatrix& rows, const Vector& beta) {
  return rows.leftCols(beta.size()) * beta;
}

Matrix block_scores(const SpikeDesign& design, const Escape& escape, const Vector& beta) {
  const Eigen::Index width = design.width();
  Matrix scores = Matrix::Zero(design.blocks, width + 2);
  auto add = [&](const RowMatrix& rows, const std::vector<int>& blocks, auto&& make_term) {
    const Vector x = predictor(rows, beta);
    for (Eigen::Index i = 0; i < rows.rows(); ++i) {
      const Term t = make_term(escape_at(escape, x[i]), i);
      const int block = blocks[static_cast<std::size_t>(i)];
      scores.row(block).head(width) += t.x * rows.row(i).head(width);
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

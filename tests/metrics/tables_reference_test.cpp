// Live comparison with R's stats package: p.adjust, poisson.test, prop.test, ks.test, pchisq.
#include <gtest/gtest.h>

#include "softsill/metrics/rescaling.hpp"
#include "softsill/metrics/testing.hpp"
#include "softsill/random.hpp"
#include "tests/reference/r_script.hpp"

namespace softsill::metrics {
namespace {

using reference::RScript;

TEST(Reference, MultiplicityLikePAdjust) {
  SKIP_WITHOUT_R();
  RandomStream random(1, 0);
  Eigen::MatrixXd p(40, 5);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double u = random.uniform();
    p.data()[i] = i % 3 == 0 ? u * u * u * u : u;
  }
  p(3, 0) = p(4, 0);  // ties
  p(5, 1) = 1.0;
  p(6, 1) = 0.0;
  RScript r;
  r.give("p", p);
  r.run(
      "p <- read_table('p')\n"
      "for (k in 1:5) {\n"
      "  say(paste0('holm', k), p.adjust(p[, k], 'holm'))\n"
      "  say(paste0('bh', k), p.adjust(p[, k], 'BH'))\n"
      "}\n");
  for (Eigen::Index k = 0; k < 5; ++k) {
    const std::vector<double> column(p.col(k).data(), p.col(k).data() + 40);
    const std::vector<double> h = holm(column), b = benjamini_hochberg(column);
    for (std::size_t i = 0; i < 40; ++i) {
      EXPECT_NEAR(h[i], r.said("holm" + std::to_string(k + 1))[i], 1e-14);
      EXPECT_NEAR(b[i], r.said("bh" + std::to_string(k + 1))[i], 1e-14);
    }
  }
}

TEST(Reference, IntervalsLikePoissonTestAndPropTest) {
  SKIP_WITHOUT_R();
  RScript r;
  r.run(
      "for (level in c(0.9, 0.95, 0.99)) for (k in c(0, 1, 2, 7, 30, 400, 12345)) {\n"
      "  say(paste0('poisson', level, '/', k), poisson.test(k, conf.level = level)$conf.int)\n"
      "}\n"
      "for (k in 0:12) say(paste0('wilson', k),\n"
      "  suppressWarnings(prop.test(k, 12, correct = FALSE)$conf.int))\n");
  for (const auto& [level, name] : {std::pair{0.9, "0.9"}, {0.95, "0.95"}, {0.99, "0.99"}}) {
    for (const std::size_t k : {0u, 1u, 2u, 7u, 30u, 400u, 12345u}) {
      const std::vector<double>& expected =
          r.said("poisson" + std::string(name) + "/" + std::to_string(k));
      const Range found = poisson_interval(k, level);
      EXPECT_NEAR(found.low, expected[0], 1e-9 * (1.0 + expected[0]));
      EXPECT_NEAR(found.high, expected[1], 1e-9 * (1.0 + expected[1]));
    }
  }
  for (std::size_t k = 0; k <= 12; ++k) {
    const std::vector<double>& expected = r.said("wilson" + std::to_string(k));
    EXPECT_NEAR(wilson_interval(k, 12).low, expected[0], 1e-12);
    EXPECT_NEAR(wilson_interval(k, 12).high, expected[1], 1e-12);
  }
}

TEST(Reference, KolmogorovLikeKsTest) {
  SKIP_WITHOUT_R();
  RandomStream random(2, 0);
  const std::vector<std::size_t> sizes{1, 2, 5, 10, 30, 99, 250, 1000};
  Eigen::MatrixXd u = Eigen::MatrixXd::Zero(1000, 8);
  for (Eigen::Index k = 0; k < 8; ++k) {
    for (std::size_t i = 0; i < sizes[static_cast<std::size_t>(k)]; ++i) {
      u(static_cast<Eigen::Index>(i), k) = std::pow(random.uniform(), 1.05);
    }
  }
  RScript r;
  r.give("u", u);
  r.run(
      "u <- read_table('u')\n"
      "n <- c(1, 2, 5, 10, 30, 99, 250, 1000)\n"
      "for (k in 1:8) {\n"
      "  test <- ks.test(u[1:n[k], k], 'punif', exact = TRUE)\n"
      "  say(paste0('ks', k), c(test$statistic, test$p.value))\n"
      "}\n");
  for (std::size_t k = 0; k < sizes.size(); ++k) {
    const double* column = u.col(static_cast<Eigen::Index>(k)).data();
    const KolmogorovSmirnov test = uniform_test({column, sizes[k]});
    const std::vector<double>& expected = r.said("ks" + std::to_string(k + 1));
    EXPECT_NEAR(test.statistic, expected[0], 1e-14) << sizes[k];
    // Beyond 300 values the corrected limit law is used.
    EXPECT_NEAR(test.p_value, expected[1], sizes[k] > 300 ? 1e-4 : 1e-9) << sizes[k];
  }
}

TEST(Reference, MixturesLikePchisq) {
  SKIP_WITHOUT_R();
  RScript r;
  r.run(
      "up <- function(x, k) pchisq(x, k, lower.tail = FALSE)\n"
      "for (x in c(0.1, 1, 4, 20, 100))\n"
      "  say(paste0('p', x), c(up(x, 1) / 2, up(x, 1) / 2 + up(x, 2) / 4,\n"
      "                        up(x, 3) / 2 + up(x, 4) / 2))\n");
  for (const int x : {1, 4, 20, 100}) {
    const std::vector<double>& expected = r.said("p" + std::to_string(x));
    const std::vector<double> found{chi_square_mixture_p(x, boundary_weights(1)),
                                    chi_square_mixture_p(x, boundary_weights(2)),
                                    chi_square_mixture_p(x, boundary_weights(1, 3))};
    for (std::size_t k = 0; k < 3; ++k) {
      EXPECT_NEAR(found[k] / expected[k], 1.0, 1e-11) << x;
    }
  }
}

}  // namespace
}  // namespace softsill::metrics

// Real trains: `neuro` of R's boot package (469 repeats of a human motoneurone's spikes within 250
// ms of a stimulus; Davison & Hinkley 1997), against plain loops written in R straight from the
// definitions.
#include <gtest/gtest.h>

#include <cmath>

#include "softsill/metrics/psth.hpp"
#include "softsill/metrics/reliability.hpp"
#include "tests/reference/r_script.hpp"

namespace softsill::metrics {
namespace {

using reference::RScript;

const char* const plain_loops = R"(
suppressMessages(library(boot))
rows <- lapply(seq_len(nrow(neuro)), function(i) sort(unique(neuro[i, !is.na(neuro[i, ])])))
say('counts', sapply(rows, length))
say('times', unlist(rows))
begin <- -251; end <- 251; span <- end - begin
say('range', range(unlist(rows)))
gamma <- function(a, b, D = 4) {                 # a is the reference
  free <- rep(TRUE, length(b)); hits <- 0
  for (t in a) {
    near <- which(free & abs(b - t) <= D + 1e-9)
    if (length(near)) { free[near[1]] <- FALSE; hits <- hits + 1 }
  }
  share <- 2 * D * length(b) / span
  (hits - share * length(a)) / ((length(a) + length(b)) / 2) / (1 - share)
}
victor <- function(a, b, q = 0.2) {
  g <- outer(0:length(a), 0:length(b), '+')
  for (i in seq_along(a)) for (j in seq_along(b))
    g[i + 1, j + 1] <- min(g[i, j + 1] + 1, g[i + 1, j] + 1, g[i, j] + q * abs(a[i] - b[j]))
  g[length(a) + 1, length(b) + 1]
}
kernel <- function(a, b, f) sum(f(outer(a, b, '-')))
rossum <- function(a, b, f = function(d) exp(-abs(d) / 10))
  sqrt(max(0, kernel(a, a, f) / 2 + kernel(b, b, f) / 2 - kernel(a, b, f)))
schreiber <- function(a, b, f = function(d) exp(-d^2 / (4 * 4^2)))
  if (length(a) && length(b)) kernel(a, b, f) / sqrt(kernel(a, a, f) * kernel(b, b, f)) else NA
event <- function(a, b) {
  if (!length(a) && !length(b)) return(NA)
  if (!length(a) || !length(b)) return(0)
  one <- function(a, b) mean(sapply(a, function(t) exp(-min(abs(b - t)) / 4)))
  (one(a, b) + one(b, a)) / 2
}
profile <- function(a, b, value) {               # average of what is linear between spikes
  cuts <- sort(unique(c(begin, a, b, end))); sum <- 0
  for (k in seq_len(length(cuts) - 1)) {
    middle <- (cuts[k] + cuts[k + 1]) / 2
    sum <- sum + value(middle) * (cuts[k + 1] - cuts[k])   # the middle is exact for linear ones
  }
  sum / span
}
around <- function(a, t) { x <- c(begin, a, end); c(max(x[x <= t]), min(x[x > t])) }
isi <- function(a, b) profile(a, b, function(t) {
  x <- diff(around(a, t)); y <- diff(around(b, t)); abs(x - y) / max(x, y)
})
spike <- function(a, b) profile(a, b, function(t) {
  p <- around(a, t); q <- around(b, t)
  near <- function(t, other) min(abs(c(begin, other, end) - t))
  s <- function(p, other)
    (near(p[1], other) * (p[2] - t) + near(p[2], other) * (t - p[1])) / (p[2] - p[1])
  x <- diff(p); y <- diff(q)
  (s(p, b) * y + s(q, a) * x) / (2 * ((x + y) / 2)^2)
})
over_pairs <- function(measure, ordered = FALSE) {
  values <- c()
  for (i in 1:59) for (j in (i + 1):60) {
    values <- c(values, measure(rows[[i]], rows[[j]]))
    if (ordered) values <- c(values, measure(rows[[j]], rows[[i]]))
  }
  mean(values, na.rm = TRUE)
}
say('gamma', over_pairs(gamma, TRUE)); say('victor', over_pairs(victor))
say('rossum', over_pairs(rossum)); say('schreiber', over_pairs(schreiber))
say('isi', over_pairs(isi)); say('spike', over_pairs(spike)); say('event', over_pairs(event))
products <- function(A, B, same) {
  values <- c()
  for (i in seq_along(A)) for (j in seq_along(B)) if (!same || i != j)
    values <- c(values, kernel(A[[i]], B[[j]], function(d) abs(d) <= 4 + 1e-9))
  mean(values)
}
A <- rows[1:40]; B <- rows[41:90]
say('similarity', 2 * products(A, B, FALSE) / (products(A, A, TRUE) + products(B, B, TRUE)))
bins <- t(sapply(rows, function(x) tabulate(floor((x - begin) / 10) + 1, nbins = 50) / 10))
say('psth', colMeans(bins))
var0 <- function(x) mean((x - mean(x))^2)
n <- nrow(bins)
say('power', (n * var0(colMeans(bins)) - mean(apply(bins, 1, var0))) / (n - 1))
)";

TEST(Neuro, EveryMeasureIsWhatPlainLoopsGive) {
  SKIP_WITHOUT_R();
  RScript r;
  r.run(plain_loops);
  const Window window{-251.0, 251.0};
  TrialSet all{{}, window};
  std::size_t next = 0;
  for (const double count : r.said("counts")) {
    const auto begin = r.said("times").begin() + static_cast<std::ptrdiff_t>(next);
    all.trains_ms.emplace_back(begin, begin + static_cast<std::ptrdiff_t>(count));
    next += static_cast<std::size_t>(count);
  }
  ASSERT_EQ(all.size(), 469u);
  const auto part = [&](std::size_t from, std::size_t to) {
    return TrialSet{{all.trains_ms.begin() + static_cast<std::ptrdiff_t>(from),
                     all.trains_ms.begin() + static_cast<std::ptrdiff_t>(to)},
                    window};
  };
  const TrialSet sixty = part(0, 60);
  for (const auto& [measure, name] : {std::pair{PairMeasure::coincidence, "gamma"},
                                      {PairMeasure::victor_purpura, "victor"},
                                      {PairMeasure::van_rossum, "rossum"},
                                      {PairMeasure::schreiber, "schreiber"},
                                      {PairMeasure::isi_distance, "isi"},
                                      {PairMeasure::spike_distance, "spike"},
                                      {PairMeasure::event_reliability, "event"}}) {
    const PairTable table(pair_matrix(measure, sixty));
    EXPECT_NEAR(*table.means().cell_cell, r.number(name), 1e-9) << name;
  }
  EXPECT_NEAR(*set_similarity(part(0, 40), part(40, 90)).value, r.number("similarity"), 1e-9);
  const RateTable rates = rate_table(all, {PsthSettings::Kind::bins, 10.0, 1.0});
  const std::vector<double> psth = rates.mean();
  ASSERT_EQ(psth.size(), 50u);
  for (std::size_t k = 0; k < 50; ++k) {
    EXPECT_NEAR(psth[k], r.said("psth")[k], 1e-12);
  }
  EXPECT_NEAR(explained_variance(rates, psth).signal_power, r.number("power"), 1e-12);
}

}  // namespace
}  // namespace softsill::metrics

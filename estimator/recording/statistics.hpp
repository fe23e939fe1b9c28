#pragma once

// Statistics of recorded signals that the quality check needs.

#include <complex>
#include <cstddef>
#include <optional>
#include <span>
#include <vector>

namespace softsill {

/// In-place discrete Fourier transform, sum_n x_n exp(-2 pi i k n / N), by halving (Cooley & Tukey
/// 1965). The size must be a power of two.
void fourier_transform(std::span<std::complex<double>> values);

/// Second-order description of a signal.
struct Spectrum {
  std::optional<double> correlation_time_ms;  ///< first lag at which the autocorrelation is 1/e
  std::optional<double> bandwidth_Hz;         ///< 90 % of the variance lies below
};

/// From up to 16 stretches of up to 65536 samples, spread evenly over the pieces.
/// Autocorrelation: unbiased, about `mean`. Bandwidth: averaged Hann-windowed periodograms (Welch
/// 1967), interpolated linearly between frequencies.
/// \param pieces stretches of signal without gaps
Spectrum describe_spectrum(const std::vector<std::span<const double>>& pieces, double step_ms,
                           double mean);

/// Two-sided p-value of Spearman's rank correlation of `values` with their order: exact over all
/// permutations up to 9 values, Student's t with n - 2 degrees of freedom beyond. Ties share ranks.
/// 1 for fewer than 3 values or when all are equal.
double order_correlation_p(std::span<const double> values);

/// Slope of the least-squares line of y against x; 0 when x does not vary.
double least_squares_slope(std::span<const double> x, std::span<const double> y);

/// Middle value (lower of the two middle ones); reorders its argument. Must not be empty.
double median(std::vector<double>& values);

/// Stretches [begin, end) of samples stuck at the lowest or the highest value.
///
/// A signal counts as clipped at an extreme when it sits there for three samples or more on at
/// least three occasions, and there three times as often as at the next value: a signal that merely
/// touches its extreme, even one rounded to few digits, thins out towards it instead.
struct SampleRange {
  std::size_t begin = 0, end = 0;
};
std::vector<SampleRange> clipped_runs(std::span<const double> values, double step_ms);

}  // namespace softsill

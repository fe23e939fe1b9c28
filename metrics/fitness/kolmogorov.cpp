#include <algorithm>
#include <cmath>
#include <numbers>

#include "softsill/error.hpp"
#include "softsill/metrics/rescaling.hpp"

namespace softsill::metrics {
namespace {

using Square = std::vector<double>;

// c = a b; all m x m.
void multiply(const Square& a, const Square& b, Square& c, std::size_t m) {
  std::fill(c.begin(), c.end(), 0.0);
  for (std::size_t i = 0; i < m; ++i) {
    for (std::size_t k = 0; k < m; ++k) {
      const double factor = a[i * m + k];
      for (std::size_t j = 0; j < m; ++j) {
        c[i * m + j] += factor * b[k * m + j];
      }
    }
  }
}

// Keeps the power in range; `exponent` counts powers of two that were taken out.
void rescale_power(Square& a, int& exponent, std::size_t m) {
  const double centre = a[(m / 2) * m + m / 2];
  if (centre > 0x1p400) {
    for (double& value : a) {
      value = std::ldexp(value, -400);
    }
    exponent += 400;
  }
}

// Marsaglia, Tsang & Wang (2003): an element of the n-th power of a matrix of size 2 ceil(n d) - 1,
// times n! / n^n.
double exact_cdf(std::size_t n, double d) {
  const auto count = static_cast<double>(n);
  const auto k = static_cast<std::size_t>(count * d) + 1;
  const std::size_t m = 2 * k - 1;
  const double h = static_cast<double>(k) - count * d;
  Square base(m * m, 0.0);
  for (std::size_t i = 0; i < m; ++i) {
    for (std::size_t j = 0; j < std::min(m, i + 2); ++j) {
      base[i * m + j] = 1.0;
    }
  }
  for (std::size_t i = 0; i < m; ++i) {
    base[i * m] -= std::pow(h, static_cast<double>(i + 1));
    base[(m - 1) * m + i] -= std::pow(h, static_cast<double>(m - i));
  }
  base[(m - 1) * m] += 2.0 * h - 1.0 > 0.0 ? std::pow(2.0 * h - 1.0, static_cast<double>(m)) : 0.0;
  for (std::size_t i = 0; i < m; ++i) {
    for (std::size_t j = 0; j < std::min(m, i + 2); ++j) {
      for (std::size_t g = 2; g + j <= i + 1; ++g) {
        base[i * m + j] /= static_cast<double>(g);
      }
    }
  }
  Square power(m * m, 0.0), scratch(m * m);
  for (std::size_t i = 0; i < m; ++i) {
    power[i * m + i] = 1.0;
  }
  int base_exponent = 0, exponent = 0;
  for (std::size_t left = n; left > 0; left /= 2) {
    if (left % 2 == 1) {
      multiply(power, base, scratch, m);
      power.swap(scratch);
      exponent += base_exponent;
      rescale_power(power, exponent, m);
    }
    multiply(base, base, scratch, m);
    base.swap(scratch);
    base_exponent *= 2;
    rescale_power(base, base_exponent, m);
  }
  double value = power[(k - 1) * m + k - 1];
  for (std::size_t i = 1; i <= n; ++i) {
    value *= static_cast<double>(i) / count;
    if (value < 0x1p-400) {
      value = std::ldexp(value, 400);
      exponent -= 400;
    }
  }
  return std::clamp(std::ldexp(value, exponent), 0.0, 1.0);
}

// The limit law (Kolmogorov 1933), each tail by the series that converges there.
double limit_cdf(double x) {
  if (x <= 0.0) {
    return 0.0;
  }
  double sum = 0.0;
  if (x < 1.0) {
    for (int k = 1; k < 40; k += 2) {
      sum += std::exp(-k * k * std::numbers::pi * std::numbers::pi / (8.0 * x * x));
    }
    return std::sqrt(2.0 * std::numbers::pi) / x * sum;
  }
  for (int k = 1; k < 20; ++k) {
    sum += (k % 2 == 1 ? 1.0 : -1.0) * std::exp(-2.0 * k * k * x * x);
  }
  return 1.0 - 2.0 * sum;
}

}  // namespace

double kolmogorov_cdf(std::size_t n, double d) {
  if (n == 0) {
    throw Error("", "Kolmogorov-Smirnov test", "there are no values");
  }
  if (std::isnan(d)) {
    throw Error("", "Kolmogorov-Smirnov test", "the statistic is not a number");
  }
  const auto count = static_cast<double>(n);
  if (d <= 0.5 / count) {
    return 0.0;
  }
  // Beyond n d^2 = 18 the upper tail, about 2 exp(-2 n d^2), is lost against 1.
  if (d >= 1.0 || count * d * d > 18.0) {
    return 1.0;
  }
  if (n <= 300) {
    return exact_cdf(n, d);
  }
  const double x = std::sqrt(count) * d;
  return limit_cdf(x + 1.0 / (6.0 * std::sqrt(count)) + (x - 1.0) / (4.0 * count));
}

double kolmogorov_quantile(std::size_t n, double level) {
  if (!(level > 0.0 && level < 1.0)) {
    throw Error("", "Kolmogorov-Smirnov test", "the level lies between 0 and 1", "0.95 is usual");
  }
  double low = 0.0, high = 1.0;
  for (int i = 0; i < 60 && high - low > 1e-12; ++i) {
    const double middle = 0.5 * (low + high);
    (kolmogorov_cdf(n, middle) < level ? low : high) = middle;
  }
  return 0.5 * (low + high);
}

KolmogorovSmirnov uniform_test(std::span<const double> values, double level) {
  KolmogorovSmirnov result;
  result.n = values.size();
  result.level = level;
  if (values.empty()) {
    return result;
  }
  std::vector<double> sorted(values.begin(), values.end());
  std::sort(sorted.begin(), sorted.end());
  if (!(sorted.front() >= 0.0 && sorted.back() <= 1.0) ||
      std::any_of(values.begin(), values.end(), [](double u) { return std::isnan(u); })) {
    throw Error("", "Kolmogorov-Smirnov test", "values must lie between 0 and 1");
  }
  const auto n = static_cast<double>(sorted.size());
  for (std::size_t i = 0; i < sorted.size(); ++i) {
    const auto rank = static_cast<double>(i);
    result.statistic =
        std::max({result.statistic, sorted[i] - rank / n, (rank + 1.0) / n - sorted[i]});
  }
  result.p_value = 1.0 - kolmogorov_cdf(result.n, result.statistic);
  result.band = kolmogorov_quantile(result.n, level);
  return result;
}

}  // namespace softsill::metrics

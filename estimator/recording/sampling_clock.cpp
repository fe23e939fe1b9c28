#include "estimator/recording/sampling_clock.hpp"

#include <algorithm>
#include <cmath>

namespace softsill {

namespace {

constexpr double jitter_share = 0.02;
constexpr double coarsest_share = 0.401;  // 40 kHz written in steps of 0.01 ms, just

double rounded_to_digits(double value, int digits) {
  const double exponent = std::floor(std::log10(value));
  // Dividing by a whole power of ten keeps 0.05 the double that "0.05" means.
  const double shift = digits - 1 - exponent;
  if (shift >= 0) {
    const double scale = std::pow(10.0, shift);
    return std::round(value * scale) / scale;
  }
  const double scale = std::pow(10.0, -shift);
  return std::round(value / scale) * scale;
}

// Half a unit in the last place of a 32-bit float, if `value` can be one.
double float_rounding(double value, double resolution) {
  const double magnitude = std::abs(value);
  const double error = std::abs(static_cast<double>(static_cast<float>(value)) - value);
  const bool is_float = error <= std::max(0.51 * resolution, 1e-14 * magnitude);
  return is_float ? std::ldexp(magnitude, -24) : 0.0;
}

}  // namespace

bool SamplingClock::add(double value, double resolution) {
  finest_ = std::min(finest_, resolution);
  const double own_float = float_rounding(value, finest_);
  if (rows_ == 0) {
    first_ = last_ = value;
    first_rounding_ = own_float;
    rows_ = 1;
    return true;
  }
  const double index = static_cast<double>(rows_);
  const double span = value - first_;
  const double step = std::max(0.0, span / index);
  const double binary = own_float + first_rounding_ + 4e-16 * (std::abs(value) + std::abs(first_));
  const double largest_step = std::max(0.0, span + finest_) / index;
  const double written = finest_ <= coarsest_share * largest_step ? 1.02 * finest_ : 0.0;
  const double tolerance = 2.0 * jitter_share * step + written + binary;
  low_ = std::max(low_, (span - tolerance) / index);
  high_ = std::min(high_, (span + tolerance) / index);
  // 32-bit floats may repeat a time while they are too coarse for the step; text may not.
  const bool stands_still = span < 0.0 || (span == 0.0 && binary < 0.5 * finest_);
  if (low_ > high_ || high_ <= 0.0 || stands_still) {
    return false;
  }
  last_ = value;
  last_rounding_ = written + binary;
  ++rows_;
  return true;
}

double SamplingClock::step_ms() const {
  if (rows_ < 2 || !(last_ > first_)) {
    return 0.0;
  }
  const double intervals = static_cast<double>(rows_ - 1);
  const double unit = times_ / over_;
  const double plain = (last_ - first_) / intervals * times_ / over_;
  const double slack = last_rounding_ / intervals * unit + 1e-12 * plain;
  const auto fits = [&](double step) {
    return std::abs(step - plain) <= slack && step >= low_ * unit * (1.0 - 1e-12) &&
           step <= high_ * unit * (1.0 + 1e-12);
  };
  for (int digits = 1; digits <= 9; ++digits) {
    const double by_step = rounded_to_digits(plain, digits);
    if (fits(by_step)) {
      return by_step;
    }
    const double by_rate = 1.0 / rounded_to_digits(1.0 / plain, digits);
    if (fits(by_rate)) {
      return by_rate;
    }
  }
  return plain;
}

}  // namespace softsill

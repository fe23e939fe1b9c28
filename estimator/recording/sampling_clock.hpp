#pragma once

// Is a time column evenly sampled? Told while it streams past, without keeping it.

#include <cstddef>

namespace softsill {

/// Follows a time column row by row. After every row it keeps the range of sampling intervals with
/// which all rows so far lie on one straight line through the first row, each row within its own
/// tolerance; when that range becomes empty, the row is where even sampling ends.
///
/// The tolerance of a row is the sum of
/// - 2 % of the sampling interval (jitter of the recording clock),
/// - one unit of the last written digit, where that is at most 40 % of the sampling interval; times
///   written more coarsely must be exact, so that a missing or doubled sample always shows,
/// - the rounding of a 32-bit float, for values that are 32-bit floats.
class SamplingClock {
 public:
  /// Milliseconds are value * times / over (one of the two is 1, so that no digit is lost).
  SamplingClock(double times, double over) : times_(times), over_(over) {}

  /// \param value      time as it stands in the file, in the file's unit
  /// \param resolution one unit of the last written digit; 0 for binary values
  /// \returns false when the row breaks even sampling (or does not come after the first)
  bool add(double value, double resolution);

  std::size_t rows() const { return rows_; }
  double first_ms() const { return first_ * times_ / over_; }
  double last_ms() const { return last_ * times_ / over_; }
  /// Sampling interval from the first and last row, rounded to the fewest digits (of the interval
  /// or of the rate) that agree with every row. 0 with fewer than two rows.
  double step_ms() const;

 private:
  double times_;
  double over_;
  std::size_t rows_ = 0;
  double first_ = 0.0;
  double last_ = 0.0;
  double last_rounding_ = 0.0;  // rounding of first and last row together, without jitter
  double first_rounding_ = 0.0;
  double finest_ = 1.0e300;  // finest resolution seen
  double low_ = 0.0;         // range of intervals that fit all rows so far
  double high_ = 1.0e300;
};

}  // namespace softsill

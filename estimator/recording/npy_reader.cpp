// NPY arrays, as published in NEP 1 of the NumPy project: magic, version, header length, a header
// that is a Python dictionary with descr, fortran_order and shape, then the numbers.

#include <algorithm>
#include <bit>
#include <charconv>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <limits>

#include "estimator/recording/sampling_clock.hpp"
#include "estimator/recording/shown_text.hpp"
#include "estimator/recording/signal_reader.hpp"
#include "softsill/error.hpp"

namespace softsill {

static_assert(std::endian::native == std::endian::little, "numbers are read as they are stored");

namespace {

struct NpyHeader {
  bool single = false;         // f4, else f8
  bool fortran_order = false;  // columns one after the other
  std::vector<std::size_t> shape;
  std::size_t item_size() const { return single ? 4 : 8; }
};

[[noreturn]] void refuse_header(const std::string& path, const std::string& what) {
  throw Error(path, "NPY header", what, "save a float32 or float64 array in the usual way");
}

/// The text after 'key': in the header's dictionary.
std::string_view value_of(std::string_view header, std::string_view key, const std::string& path) {
  for (const char quote : {'\'', '"'}) {
    const std::string quoted = quote + std::string(key) + quote;
    std::size_t at = header.find(quoted);
    if (at != std::string_view::npos) {
      at = header.find_first_not_of(" :", at + quoted.size());
      if (at != std::string_view::npos) {
        return header.substr(at);
      }
    }
  }
  refuse_header(path, "names no " + std::string(key));
}

NpyHeader read_header(ByteSource& source) {
  const std::string& path = source.path();
  unsigned char start[12];
  if (source.read_fully(reinterpret_cast<char*>(start), 8) != 8) {
    refuse_header(path, "is cut short");
  }
  const int version = start[6];
  if (version < 1 || version > 3) {
    refuse_header(path, "has the unknown format version " + std::to_string(version));
  }
  const std::size_t width = version == 1 ? 2 : 4;
  if (source.read_fully(reinterpret_cast<char*>(start) + 8, width) != width) {
    refuse_header(path, "is cut short");
  }
  std::size_t length = 0;
  for (std::size_t i = width; i-- > 0;) {
    length = length * 256 + start[8 + i];
  }
  if (length > 65536) {
    refuse_header(path, "is " + std::to_string(length) + " bytes long, which no such array needs");
  }
  std::string text(length, ' ');
  if (source.read_fully(text.data(), length) != length) {
    refuse_header(path, "is cut short");
  }

  NpyHeader header;
  const std::string_view type = value_of(text, "descr", path);
  const std::string_view name = type.substr(1, 3);
  if (name == "<f4" || name == "<f8") {
    header.single = name == "<f4";
  } else {
    refuse_header(path, "the numbers are of type '" +
                            shown_text(name.substr(0, name.find_first_of("'\""))) +
                            "', not little-endian float32 or float64");
  }
  header.fortran_order = value_of(text, "fortran_order", path).substr(0, 4) == "True";
  std::string_view shape = value_of(text, "shape", path);
  const std::size_t close = shape.find(')');
  if (shape.empty() || shape.front() != '(' || close == std::string_view::npos) {
    refuse_header(path, "has no readable shape");
  }
  shape = shape.substr(1, close - 1);
  for (std::size_t at = 0; (at = shape.find_first_not_of(" ,", at)) != std::string_view::npos;) {
    std::size_t extent = 0;
    const auto [stop, error] =
        std::from_chars(shape.data() + at, shape.data() + shape.size(), extent);
    if (error != std::errc{}) {
      refuse_header(path, "has no readable shape");
    }
    header.shape.push_back(extent);
    at = static_cast<std::size_t>(stop - shape.data());
  }
  return header;
}

/// Numbers in the order of the file.
class NumberStream {
 public:
  NumberStream(ByteSource& source, const NpyHeader& header)
      : source_(source), item_(header.item_size()), piece_(std::size_t{1} << 18) {}

  double next() {
    if (at_ == filled_) {
      filled_ = source_.read_fully(piece_.data(), piece_.size());
      at_ = 0;
      if (filled_ < item_) {
        throw Error(source_.path(), "element " + std::to_string(taken_), "the array is cut short",
                    "the file was not written or copied completely");
      }
      filled_ -= filled_ % item_;
    }
    double value = 0.0;
    if (item_ == 8) {
      std::memcpy(&value, piece_.data() + at_, 8);
    } else {
      float single = 0.0f;
      std::memcpy(&single, piece_.data() + at_, 4);
      value = single;
    }
    at_ += item_;
    ++taken_;
    return value;
  }

 private:
  ByteSource& source_;
  std::size_t item_;
  std::vector<char> piece_;
  std::size_t at_ = 0, filled_ = 0, taken_ = 0;
};

void check_size(const ByteSource& source, const NpyHeader& header, std::size_t rows,
                std::size_t columns) {
  if (rows > most_samples) {
    throw Error(
        source.path(), "NPY header",
        "announces " + std::to_string(rows) + " samples, more than " + std::to_string(most_samples),
        "split the recording into sweeps");
  }
  const std::uint64_t needed = std::uint64_t{rows} * columns * header.item_size();
  if (!source.packed() && source.file_size() < needed) {
    throw Error(source.path(), "",
                "holds " + std::to_string(source.file_size()) +
                    " bytes where its header announces " + std::to_string(needed),
                "the file was not written or copied completely");
  }
  // Bytes beyond the array: something else than an array was saved, or the file has holes.
  if (!source.packed() && source.file_size() > needed + 131072) {
    throw Error(source.path(), "",
                "holds " + std::to_string(source.file_size()) +
                    " bytes where its header announces only " + std::to_string(needed),
                "check that the right file is named and was written completely");
  }
}

std::string element_place(std::size_t row, const char* column) {
  return "row " + std::to_string(row) + ", column " + column;
}

class NpySignalReader : public SignalReader {
 public:
  bool recognises(const ByteSource& source) const override { return looks_like_npy(source); }

  std::vector<SampledSignals> read(ByteSource& source,
                                   const SignalRequest& request) const override {
    const NpyHeader header = read_header(source);
    const std::string& path = request.path;
    const std::size_t dimensions = header.shape.size();
    if (dimensions < 1 || dimensions > 2) {
      refuse_header(path, "announces " + std::to_string(dimensions) + " dimensions, not 1 or 2");
    }
    const std::size_t rows = header.shape[0];
    const std::size_t width = dimensions == 2 ? header.shape[1] : 1;
    if (width > 3 && rows <= 3) {
      refuse_header(path, "announces " + std::to_string(rows) + " rows and " +
                              std::to_string(width) +
                              " columns: samples run along the first axis, transpose the array");
    }
    if (width < 1 || width > 3) {
      refuse_header(path, "announces " + std::to_string(width) +
                              " columns, not time, driving signal and perhaps potential");
    }
    check_size(source, header, rows, width);
    // With sampling_ms in the sheet one or two columns are signals without a time column.
    const bool with_time = !(request.sampling_ms && width < 3);
    if (with_time && width < 2) {
      refuse_header(path,
                    "announces one column, so the times are missing; give sampling_ms for "
                    "this sweep in the sheet");
    }
    if (rows < 2) {
      throw Error(path, "", rows == 0 ? "holds no samples" : "holds only one sample",
                  "check that it was written completely");
    }
    const bool with_voltage = width == (with_time ? 3u : 2u);
    const bool check_clock = with_time && !request.sampling_ms;

    SampledSignals signals;
    signals.input.resize(rows);
    signals.voltage_mV.resize(with_voltage ? rows : 0);
    SamplingClock clock(1, 1);
    double first_time = 0.0;
    double last_time = 0.0;
    const auto take = [&](std::size_t row, std::size_t column, double value) {
      const std::size_t role = column + (with_time ? 0 : 1);
      const char* const name = role == 0                    ? "time_ms"
                               : role == 2                  ? "voltage_mV"
                               : request.input_unit.empty() ? "current_nA"
                                                            : "input";
      if (!std::isfinite(value)) {
        throw Error(path, element_place(row, name), "is not a finite number",
                    "the signal must be known throughout: end the sweep before the gap");
      }
      if (role == 1) {
        signals.input[row] = value;
      } else if (role == 2) {
        signals.voltage_mV[row] = value;
      } else {
        last_time = value;
        first_time = row == 0 ? value : first_time;
        if (check_clock && !clock.add(value, 0.0)) {
          char text[160];
          std::snprintf(text, sizeof text,
                        "sampling is not uniform: %.10g ms follows %.10g ms where the rows before "
                        "are %.6g ms apart",
                        value, clock.last_ms(), clock.step_ms());
          throw Error(path, element_place(row, name), text, "resample, or split at the gap");
        }
      }
    };
    NumberStream numbers(source, header);
    if (header.fortran_order && width > 1) {
      for (std::size_t column = 0; column < width; ++column) {
        for (std::size_t row = 0; row < rows; ++row) {
          take(row, column, numbers.next());
        }
      }
    } else {
      for (std::size_t row = 0; row < rows; ++row) {
        for (std::size_t column = 0; column < width; ++column) {
          take(row, column, numbers.next());
        }
      }
    }

    if (check_clock) {
      signals.start_ms = clock.first_ms();
      signals.step_ms = clock.step_ms();
      if (!(signals.step_ms > 0.0)) {
        throw Error(path, "column time_ms", "does not increase",
                    "the first column is the time in ms");
      }
    } else {
      signals.start_ms = first_time;
      signals.step_ms = *request.sampling_ms;
      const double expected = signals.step_ms * static_cast<double>(rows - 1);
      if (with_time &&
          std::abs(last_time - first_time - expected) > 1e-3 * expected + signals.step_ms) {
        throw Error(path, "column time_ms", "does not agree with sampling_ms",
                    "correct sampling_ms in the sheet or leave it out");
      }
    }
    std::vector<SampledSignals> sweeps;
    sweeps.push_back(std::move(signals));
    return sweeps;
  }
};

}  // namespace

bool looks_like_npy(const ByteSource& source) {
  return source.first_bytes().substr(0, 6) == "\x93NUMPY";
}

const SignalReader& npy_signal_reader() {
  static const NpySignalReader reader;
  return reader;
}

std::vector<double> read_npy_vector(ByteSource& source) {
  const NpyHeader header = read_header(source);
  const bool flat = header.shape.size() == 1 || (header.shape.size() == 2 && header.shape[1] == 1);
  if (!flat) {
    refuse_header(source.path(), "announces a table where a plain list of numbers is needed");
  }
  check_size(source, header, header.shape[0], 1);
  NumberStream numbers(source, header);
  std::vector<double> values(header.shape[0]);
  for (std::size_t i = 0; i < values.size(); ++i) {
    values[i] = numbers.next();
    if (!std::isfinite(values[i])) {
      throw Error(source.path(), "element " + std::to_string(i), "is not a finite number");
    }
  }
  return values;
}

}  // namespace softsill

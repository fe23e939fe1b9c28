#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <new>

#include "estimator/recording/csv_rows.hpp"
#include "estimator/recording/sampling_clock.hpp"
#include "estimator/recording/shown_text.hpp"
#include "estimator/recording/signal_reader.hpp"
#include "softsill/error.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {

namespace {

const std::vector<ColumnUnit> time_columns = {
    {"time_ms", 1, 1}, {"time_s", 1e3, 1}, {"time_us", 1, 1e3}};
const std::vector<ColumnUnit> current_columns = {
    {"current_nA", 1, 1}, {"current_pA", 1, 1e3}, {"current_A", 1e9, 1}};
const std::vector<ColumnUnit> voltage_columns = {{"voltage_mV", 1, 1}, {"voltage_V", 1e3, 1}};
const std::vector<ColumnUnit> input_columns = {{"input", 1, 1}};
const std::vector<ColumnUnit> spike_columns = {
    {"spike_ms", 1, 1}, {"spike_s", 1e3, 1}, {"spike_us", 1, 1e3}};

struct Place {
  std::size_t column = 0;
  ColumnUnit unit;
  double convert(double value) const { return value * unit.times / unit.over; }
};

/// The column of a kind; empty when the header has none. Two columns of one kind are refused.
std::optional<Place> find_column(const CsvRows& rows, const std::string& path,
                                 const std::vector<ColumnUnit>& kind) {
  std::optional<Place> found;
  for (std::size_t column = 0; column < rows.columns().size(); ++column) {
    for (const ColumnUnit& unit : kind) {
      if (rows.columns()[column] == unit.name) {
        if (found) {
          throw Error(path, rows.place(),
                      "names both " + rows.columns()[found->column] + " and " + unit.name,
                      "keep one of them");
        }
        found = Place{column, unit};
      }
    }
  }
  return found;
}

void refuse_unknown_columns(const CsvRows& rows, const std::string& path,
                            std::initializer_list<const std::vector<ColumnUnit>*> kinds) {
  std::vector<std::string> known;
  for (const auto* kind : kinds) {
    for (const ColumnUnit& unit : *kind) {
      known.push_back(unit.name);
    }
  }
  for (const std::string& name : rows.columns()) {
    if (std::find(known.begin(), known.end(), name) == known.end()) {
      std::string list;
      for (const std::string& word : known) {
        list += (list.empty() ? "" : ", ") + word;
      }
      throw Error(path, rows.place(), "unknown column '" + shown_text(name) + "'",
                  "did you mean " + nearest_word(name, known) + "? Known are " + list);
    }
  }
}

struct Columns {
  std::optional<Place> time, voltage;
  Place input;
};

Columns find_columns(const CsvRows& rows, const SignalRequest& request) {
  const std::string& path = request.path;
  refuse_unknown_columns(rows, path,
                         {&time_columns, &current_columns, &input_columns, &voltage_columns});
  Columns columns;
  columns.time = find_column(rows, path, time_columns);
  if (!columns.time && !request.sampling_ms) {
    throw Error(path, rows.place(), "has no column time_ms",
                "add it, or give sampling_ms for this sweep in the sheet");
  }
  columns.voltage = find_column(rows, path, voltage_columns);
  const std::optional<Place> current = find_column(rows, path, current_columns);
  const std::optional<Place> input = find_column(rows, path, input_columns);
  if (request.input_unit.empty()) {
    if (input) {
      throw Error(path, rows.place(), "has a column input, but the sheet gives no input_unit",
                  "name it current_nA, or give input_unit in the sheet");
    }
    if (!current) {
      throw Error(path, rows.place(), "has no column current_nA",
                  "the injected current is needed; a driving signal that is no current is called "
                  "input");
    }
    columns.input = *current;
  } else {
    if (current) {
      throw Error(path, rows.place(),
                  "has a column " + current->unit.name + ", but the sheet gives an input_unit",
                  "call the driving signal input, or drop input_unit from the sheet");
    }
    if (!input) {
      throw Error(path, rows.place(), "has no column input",
                  "the driving signal is needed; the sheet gives its unit as input_unit");
    }
    columns.input = *input;
  }
  return columns;
}

class CsvSignalReader : public SignalReader {
 public:
  bool recognises(const ByteSource&) const override { return true; }

  std::vector<SampledSignals> read(ByteSource& source,
                                   const SignalRequest& request) const override {
    CsvRows rows(source);
    const Columns columns = find_columns(rows, request);
    const Place time = columns.time.value_or(Place{});
    if (columns.time && time.column != 0) {
      throw Error(request.path, rows.place(), "the time column is not the first",
                  "put " + time.unit.name + " first");
    }
    const bool check_clock = columns.time && !request.sampling_ms;
    SamplingClock clock(time.unit.times, time.unit.over);
    SampledSignals signals;
    std::vector<double>& input = signals.input;
    std::vector<double>& voltage = signals.voltage_mV;
    std::vector<double> row(rows.columns().size());
    double first_time = 0.0;
    double last_time = 0.0;
    while (rows.next(row)) {
      if (check_clock) {
        if (!clock.add(row[0], std::pow(10.0, -rows.first_decimals()))) {
          refuse_time(request.path, rows, row[0], time.unit, clock);
        }
      } else if (columns.time) {
        last_time = time.convert(row[0]);
        first_time = input.empty() ? last_time : first_time;
      }
      input.push_back(columns.input.convert(row[columns.input.column]));
      if (columns.voltage) {
        voltage.push_back(columns.voltage->convert(row[columns.voltage->column]));
      }
      if (input.size() == reserve_after && !source.packed()) {
        reserve(signals, source, rows);
      }
      if (input.size() > most_samples) {
        throw Error(request.path, rows.place(),
                    "has more than " + std::to_string(most_samples) + " samples",
                    "split the recording into sweeps");
      }
    }
    if (input.size() < 2) {
      throw Error(request.path, "",
                  input.empty() ? "holds a header but no samples" : "holds only one sample",
                  "check that it was written completely");
    }
    if (check_clock) {
      signals.start_ms = clock.first_ms();
      signals.step_ms = clock.step_ms();
      if (!(signals.step_ms > 0.0)) {
        throw Error(request.path, "column " + time.unit.name, "does not increase",
                    "write the times with more decimals, or give sampling_ms in the sheet");
      }
    } else {
      signals.start_ms = first_time;
      signals.step_ms = *request.sampling_ms;
      const double expected = signals.step_ms * static_cast<double>(input.size() - 1);
      const double found = last_time - first_time;
      if (columns.time && std::abs(found - expected) > 1e-3 * expected + signals.step_ms) {
        throw Error(request.path, "column " + time.unit.name,
                    "spans " + std::to_string(found) + " ms where sampling_ms makes it " +
                        std::to_string(expected) + " ms",
                    "correct sampling_ms in the sheet or leave it out");
      }
    }
    std::vector<SampledSignals> sweeps;
    sweeps.push_back(std::move(signals));
    return sweeps;
  }

 private:
  // Late enough that a file which is mostly holes was refused before memory is asked for.
  static constexpr std::size_t reserve_after = 1 << 16;

  static void reserve(SampledSignals& signals, const ByteSource& source, const CsvRows& rows) {
    const double bytes_per_row =
        static_cast<double>(rows.bytes_taken()) / static_cast<double>(signals.input.size());
    // Late rows are no shorter than early ones where time grows; 2 % to spare otherwise.
    const double expected = 1.02 * static_cast<double>(source.file_size()) / bytes_per_row;
    const auto room =
        static_cast<std::size_t>(std::min(expected, static_cast<double>(most_samples)));
    signals.input.reserve(room);
    if (!signals.voltage_mV.empty()) {
      signals.voltage_mV.reserve(room);
    }
  }

  [[noreturn]] static void refuse_time(const std::string& path, const CsvRows& rows, double value,
                                       const ColumnUnit& unit, const SamplingClock& clock) {
    char text[160];
    const double now = value * unit.times / unit.over;
    if (clock.rows() == 1) {
      std::snprintf(text, sizeof text, "the time does not increase (%.10g ms after %.10g ms)", now,
                    clock.last_ms());
    } else {
      std::snprintf(text, sizeof text,
                    "sampling is not uniform: %.10g ms follows %.10g ms where the rows before are "
                    "%.6g ms apart",
                    now, clock.last_ms(), clock.step_ms());
    }
    throw Error(path, rows.place(0), text,
                "resample, split at the gap, or give sampling_ms in the sheet if only the written "
                "times are coarse");
  }
};

}  // namespace

const SignalReader& csv_signal_reader() {
  static const CsvSignalReader reader;
  return reader;
}

namespace {

void check_spike(const std::string& path, const std::string& place, double time,
                 const std::vector<double>& before, double start_ms, double end_ms) {
  char text[160];
  if (!before.empty() && time == before.back()) {
    std::snprintf(text, sizeof text, "the spike at %.10g ms is listed twice", time);
    throw Error(path, place, text, "keep one");
  }
  if (!before.empty() && time < before.back()) {
    std::snprintf(text, sizeof text, "spikes are not sorted: %.10g ms follows %.10g ms", time,
                  before.back());
    throw Error(path, place, text, "sort them by time");
  }
  if (!(time >= start_ms && time < end_ms)) {
    std::snprintf(text, sizeof text,
                  "the spike at %.10g ms lies outside the sweep (%.10g to %.10g ms)", time,
                  start_ms, end_ms);
    throw Error(path, place, text, "spike times are on the clock of the recording's time column");
  }
}

}  // namespace

ReadSpikes read_spikes(const std::string& path, double start_ms, double end_ms) {
  ByteSource source(path);
  ReadSpikes result;
  if (looks_like_npy(source)) {
    const std::vector<double> times = read_npy_vector(source);
    for (std::size_t i = 0; i < times.size(); ++i) {
      check_spike(path, "element " + std::to_string(i), times[i], result.times_ms, start_ms,
                  end_ms);
      result.times_ms.push_back(times[i]);
    }
  } else {
    CsvRows rows(source);
    refuse_unknown_columns(rows, path, {&spike_columns});
    const std::optional<Place> spike = find_column(rows, path, spike_columns);
    std::array<double, 1> row{};
    while (rows.next(row)) {
      const double time = spike->convert(row[0]);
      check_spike(path, rows.place(), time, result.times_ms, start_ms, end_ms);
      result.times_ms.push_back(time);
    }
  }
  result.sha256 = source.finish_fingerprint();
  return result;
}

ReadSignals read_signals(const SignalRequest& request) {
  ByteSource source(request.path);
  ReadSignals result;
  try {
    for (const SignalReader* reader : {&npy_signal_reader(), &csv_signal_reader()}) {
      if (reader->recognises(source)) {
        result.sweeps = reader->read(source, request);
        break;
      }
    }
  } catch (const std::bad_alloc&) {
    throw Error(request.path, "", "does not fit into this computer's memory",
                "split the recording into sweeps or shorten it");
  }
  result.sha256 = source.finish_fingerprint();
  return result;
}

}  // namespace softsill

#include <algorithm>
#include <cstdint>
#include <limits>
#include <nlohmann/json.hpp>
#include <string>

#include "estimator/fit/estimate_words.hpp"
#include "softsill/files.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {
namespace {

// Kernels keep the order in which they were written.
using Json = nlohmann::ordered_json;

/// A place in the file that knows how to name itself.
class Field {
 public:
  Field(const Json& json, const std::string& file) : json_(&json), file_(&file) {}

  [[noreturn]] void fail(const std::string& what, const std::string& remedy = {}) const {
    throw Error(*file_, path_, what, remedy);
  }
  bool has(const char* key) const { return json_->is_object() && json_->contains(key); }
  Field operator[](const char* key) const {
    if (!json_->is_object()) {
      fail("must be an object");
    }
    Field inside(*this);
    inside.path_ += (path_.empty() ? "" : ".") + std::string(key);
    const auto found = json_->find(key);
    if (found == json_->end()) {
      inside.fail("is missing", "the file is not a complete estimate; fit again");
    }
    inside.json_ = &*found;
    return inside;
  }
  template <typename Take>
  void for_each(Take&& take) const {
    if (!json_->is_array()) {
      fail("must be a list");
    }
    for (std::size_t i = 0; i < json_->size(); ++i) {
      Field inside(*this);
      inside.path_.append("[").append(std::to_string(i)).append("]");
      inside.json_ = &(*json_)[i];
      take(inside);
    }
  }
  template <typename Take>
  void for_each_key(Take&& take) const {
    if (!json_->is_object()) {
      fail("must be an object");
    }
    for (const auto& item : json_->items()) {
      take(item.key(), (*this)[item.key().c_str()]);
    }
  }

  bool null() const { return json_->is_null(); }
  std::string text() const {
    if (!json_->is_string()) {
      fail("must be text");
    }
    return json_->get<std::string>();
  }
  bool flag() const {
    if (!json_->is_boolean()) {
      fail("must be true or false");
    }
    return json_->get<bool>();
  }
  double number() const {
    if (!json_->is_number()) {
      fail("must be a number");
    }
    return json_->get<double>();
  }
  std::optional<double> optional_number() const {
    return null() ? std::nullopt : std::optional<double>(number());
  }
  /// Null, which stands for what was not finite, becomes NaN again.
  double number_or_nan() const {
    return null() ? std::numeric_limits<double>::quiet_NaN() : number();
  }
  double positive() const {
    const double value = number();
    if (!(value > 0.0)) {
      fail("must be above 0");
    }
    return value;
  }
  std::uint64_t count(std::uint64_t most = std::numeric_limits<std::uint64_t>::max()) const {
    if (!json_->is_number_unsigned() || json_->get<std::uint64_t>() > most) {
      fail("must be a whole number" + (most < std::numeric_limits<std::uint64_t>::max()
                                           ? " from 0 to " + std::to_string(most)
                                           : " of at least 0"));
    }
    return json_->get<std::uint64_t>();
  }
  std::vector<double> numbers() const {
    std::vector<double> out;
    for_each([&](const Field& each) { out.push_back(each.number()); });
    return out;
  }
  std::vector<double> numbers_or_nan() const {
    std::vector<double> out;
    for_each([&](const Field& each) { out.push_back(each.number_or_nan()); });
    return out;
  }
  std::vector<std::string> texts() const {
    std::vector<std::string> out;
    for_each([&](const Field& each) { out.push_back(each.text()); });
    return out;
  }
  template <typename Words>
  auto word(const Words& words) const {
    const std::string said = text();
    std::vector<std::string> known;
    for (const auto& [value, name] : words) {
      if (said == name) {
        return value;
      }
      known.emplace_back(name);
    }
    fail("unknown word '" + said + "'", "did you mean '" + nearest_word(said, known) + "'?");
  }
  /// Runs `make` and gives its Error this file and place.
  template <typename Make>
  auto at(Make&& make) const {
    try {
      return make();
    } catch (const Error& error) {
      throw Error(*file_, error.place().empty() ? path_ : path_ + ", " + error.place(),
                  error.problem(), error.remedy());
    }
  }

 private:
  const Json* json_;
  const std::string* file_;
  std::string path_;
};

Quantity read_quantity(const Field& field) {
  Quantity out;
  out.value = field["value"].optional_number();
  out.low = field["low"].optional_number();
  out.high = field["high"].optional_number();
  out.unit = field["unit"].text();
  out.method = field["method"].text();
  if (!out.value) {
    out.why_absent = field["why_absent"].text();
  }
  return out;
}

KernelCurve read_curve(const std::string& name, const Field& field) {
  KernelCurve out;
  out.kernel = name;
  if (field.has("why_absent")) {
    out.why_absent = field["why_absent"].text();
    return out;
  }
  out.unit = field["unit"].text();
  out.effective_degrees_of_freedom = field["effective_degrees_of_freedom"].number_or_nan();
  out.smoothing = field["smoothing"].optional_number();
  field["undetermined_ms"].for_each([&](const Field& each) {
    const std::vector<double> ends = each.numbers();
    if (ends.size() != 2) {
      each.fail("must hold a beginning and an end");
    }
    out.undetermined.push_back({ends[0], ends[1]});
  });
  out.lag_ms = field["lag_ms"].numbers();
  const auto column = [&](const char* key) {
    const Field list = field[key];
    std::vector<double> values = list.numbers_or_nan();
    if (values.size() != out.lag_ms.size()) {
      list.fail("must be as long as lag_ms");
    }
    return values;
  };
  out.value = column("value");
  out.low = column("low");
  out.high = column("high");
  return out;
}

Kernel read_kernel(const Field& field) {
  Kernel out;
  const Field family = field["family"];
  out.basis.family = family.at([&] { return kernel_family_from(family.text()); });
  if (!out.present()) {
    return out;
  }
  out.basis.support_ms = field["support_ms"].positive();
  if (out.basis.family == KernelFamily::exponentials) {
    field["time_constants_ms"].for_each(
        [&](const Field& each) { out.basis.time_constants_ms.push_back(each.positive()); });
  } else {
    const int degree = out.basis.family == KernelFamily::spline ? 3 : 0;
    if (field["degree"].count(9) != static_cast<std::uint64_t>(degree)) {
      field["degree"].fail("must be " + std::to_string(degree) + " for this family");
    }
    out.basis.degree = degree;
    const Field knots = field["knots_ms"];
    out.basis.knots_ms = knots.numbers();
    if (out.basis.knots_ms.size() < static_cast<std::size_t>(degree) + 2 ||
        !std::is_sorted(out.basis.knots_ms.begin(), out.basis.knots_ms.end()) ||
        out.basis.knots_ms.front() == out.basis.knots_ms.back()) {
      knots.fail("must hold at least " + std::to_string(degree + 2) + " rising lags");
    }
  }
  const Field coefficients = field["coefficients"];
  out.coefficients = coefficients.numbers();
  if (out.coefficients.size() != out.basis.size() || out.coefficients.empty()) {
    coefficients.fail("holds " + std::to_string(out.coefficients.size()) +
                      " numbers where the basis has " + std::to_string(out.basis.size()));
  }
  return out;
}

Model read_model(const Field& field, FitStatus status) {
  Model out;
  if (field.null()) {
    if (trustworthy(status)) {
      field.fail("is missing although the fit converged");
    }
    return out;
  }
  out.name = field["name"].text();
  out.input_unit = field["input_unit"].text();
  out.scale = field["scale"].word(scale_words);
  out.resting_potential = field["resting_potential"].number();
  out.threshold = field["threshold"].number();
  out.noise_level = field["noise_level"].positive();
  out.refractory_ms = field["refractory_ms"].number();
  if (out.refractory_ms < 0.0) {
    field["refractory_ms"].fail("must not be below 0");
  }
  const Field escape = field["escape"], function = escape["function"];
  out.escape.kind = function.at([&] { return escape_kind_from(function.text()); });
  out.escape.lambda_0_per_ms = escape["lambda_0_per_ms"].positive();
  out.escape.exponent = escape["exponent"].positive();
  out.kappa = read_kernel(field["kappa"]);
  out.eta = read_kernel(field["eta"]);
  out.theta_1 = read_kernel(field["theta_1"]);
  return out;
}

std::vector<double> read_matrix(const Field& field, std::size_t columns) {
  std::vector<double> out;
  std::size_t rows = 0;
  field.for_each([&](const Field& row) {
    const std::vector<double> values = row.numbers_or_nan();
    if (values.size() != columns) {
      row.fail("must hold one number per coordinate, " + std::to_string(columns));
    }
    out.insert(out.end(), values.begin(), values.end());
    ++rows;
  });
  if (rows != 0 && rows != columns) {
    field.fail("must hold one row per coordinate, " + std::to_string(columns));
  }
  return out;
}

Provenance read_provenance(const Field& field) {
  Provenance out;
  out.program_version = field["program_version"].text();
  out.command_line = field["command_line"].text();
  out.seed = field["seed"].count();
  field["inputs"].for_each([&](const Field& each) {
    out.inputs.push_back({each["path"].text(), each["sha256"].text()});
  });
  return out;
}

Json parse(const std::string& text, const std::string& file) {
  try {
    return Json::parse(text);
  } catch (const Json::parse_error& error) {
    const std::size_t end = std::min<std::size_t>(error.byte, text.size());
    const auto line =
        1 + std::count(text.begin(), text.begin() + static_cast<std::ptrdiff_t>(end), '\n');
    throw Error(file, "line " + std::to_string(line), "is not JSON",
                "give an estimate.json as written by softsill fit");
  } catch (const Json::out_of_range&) {
    throw Error(file, "", "holds a number too large to read",
                "give an estimate.json as written by softsill fit");
  }
}

}  // namespace

Estimate read_estimate(const std::string& path) {
  const Json json = parse(read_text_file(path), path);
  const Field top(json, path);
  if (!top.has("schema_version")) {
    throw Error(path, "schema_version", "is missing",
                "give an estimate.json as written by softsill fit");
  }
  const std::uint64_t version = top["schema_version"].count();
  if (version != Estimate::schema_version) {
    top["schema_version"].fail(
        "is " + std::to_string(version) + ", this program reads " +
            std::to_string(Estimate::schema_version),
        "fit again with this program, or read it with the one that wrote it");
  }
  constexpr std::uint64_t most_starts = 1000000;
  Estimate out;
  out.cell = top["cell"].text();
  out.status = top["status"].word(status_words);
  out.status_sentence = top["status_sentence"].text();
  out.mode = top["mode"].word(mode_words);
  out.spikes = top["spikes"].count();
  out.analysed_ms = top["analysed_ms"].number_or_nan();
  out.left_out_ms = top["left_out_ms"].number_or_nan();
  out.left_out_spikes = top["left_out_spikes"].count();
  out.log_likelihood = top["log_likelihood"].number_or_nan();
  out.spike_log_likelihood = top["spike_log_likelihood"].number_or_nan();
  out.constant_rate_log_likelihood = top["constant_rate_log_likelihood"].number_or_nan();
  out.log_marginal_likelihood = top["log_marginal_likelihood"].number_or_nan();
  out.effective_degrees_of_freedom = top["effective_degrees_of_freedom"].number_or_nan();
  out.noise_level = read_quantity(top["noise_level"]);
  out.threshold = read_quantity(top["threshold"]);
  out.resting_potential = read_quantity(top["resting_potential"]);
  top["parameters"].for_each([&](const Field& each) {
    out.parameters.push_back({each["name"].text(), read_quantity(each)});
  });
  top["kernels"].for_each_key([&](const std::string& name, const Field& field) {
    out.kernels.push_back(read_curve(name, field));
  });
  out.limits = top["limits"].texts();
  out.notes = top["notes"].texts();
  const Field consistency = top["kappa_consistency"];
  out.kappa_consistency.tested = consistency["tested"].flag();
  if (out.kappa_consistency.tested) {
    out.kappa_consistency.statistic = consistency["statistic"].number_or_nan();
    out.kappa_consistency.degrees_of_freedom = consistency["degrees_of_freedom"].number_or_nan();
    out.kappa_consistency.p_value = consistency["p_value"].number_or_nan();
  }
  out.kappa_consistency.sentence = consistency["sentence"].text();
  const Field nodes = top["node_error"];
  out.node_error.nodes = nodes["nodes"].count();
  out.node_error.expected_spikes_error = nodes["expected_spikes_error"].number_or_nan();
  out.node_error.allowed = nodes["allowed"].number_or_nan();
  out.node_error.largest_shift_in_se = nodes["largest_shift_in_se"].number_or_nan();
  const Field minimizer = top["minimizer"];
  out.newton_decrement = minimizer["newton_decrement"].number_or_nan();
  out.starts = static_cast<int>(minimizer["starts"].count(most_starts));
  out.starts_agreeing = static_cast<int>(minimizer["starts_agreeing"].count(most_starts));
  out.minimizer_report = minimizer["report"].text();
  const Field variant = top["variant"];
  out.variant = variant.at([&] { return parse_variant(variant.text(), path); });
  out.model = read_model(top["model"], out.status);
  const Field coordinates = top["coordinates"];
  out.coordinate_names = coordinates["names"].texts();
  out.coordinates = coordinates["values"].numbers_or_nan();
  if (out.coordinates.size() != out.coordinate_names.size()) {
    coordinates["values"].fail("must hold one number per name");
  }
  out.covariance = read_matrix(coordinates["covariance"], out.coordinates.size());
  out.sandwich_covariance = read_matrix(coordinates["sandwich_covariance"], out.coordinates.size());
  out.provenance = read_provenance(top["provenance"]);
  return out;
}

}  // namespace softsill

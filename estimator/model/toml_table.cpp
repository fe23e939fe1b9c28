#include "estimator/model/toml_table.hpp"

#include <toml++/toml.h>

#include <array>
#include <charconv>
#include <cmath>
#include <cstdio>

#include "softsill/error.hpp"
#include "softsill/nearest_word.hpp"

namespace softsill {
namespace {

std::string in_words(double value) {
  std::array<char, 32> buffer;
  std::snprintf(buffer.data(), buffer.size(), "%g", value);
  return buffer.data();
}

std::string in_words(const Range& range) {
  if (range.low == 0.0 && range.high == largest_number) {
    return range.low_allowed ? "a number, 0 or more" : "a positive number";
  }
  if (range.low == -largest_number && range.high == largest_number) {
    return "a number";
  }
  return std::string("a number ") + (range.low_allowed ? "from " : "above ") + in_words(range.low) +
         " up to " + in_words(range.high);
}

bool inside(double value, const Range& range) {
  return std::isfinite(value) && value <= range.high &&
         (range.low_allowed ? value >= range.low : value > range.low);
}

}  // namespace

struct TomlTable::Inside {
  std::shared_ptr<toml::table> root;  // keeps `here` alive
  const toml::table* here = nullptr;
  std::string path;
  std::string name;  // dotted, empty for the top
  std::vector<std::string> known;

  std::string full(std::string_view key) const {
    return name.empty() ? std::string(key) : name + "." + std::string(key);
  }
  const toml::node* find(std::string_view key) {
    known.emplace_back(key);
    return here->get(key);
  }
};

TomlTable TomlTable::parse(const std::string& text, const std::string& path) {
  auto in = std::make_shared<Inside>();
  in->path = path;
  try {
    in->root = std::make_shared<toml::table>(toml::parse(text, path));
  } catch (const toml::parse_error& error) {
    throw Error(path, "line " + std::to_string(error.source().begin.line),
                "not valid TOML: " + std::string(error.description()));
  }
  in->here = in->root.get();
  return TomlTable(std::move(in));
}

bool TomlTable::has(std::string_view key) const { return inside_->here->contains(key); }

bool TomlTable::holds_text(std::string_view key) const {
  const toml::node* node = inside_->here->get(key);
  return node != nullptr && node->is_string();
}

void TomlTable::fail(std::string_view key, const std::string& what,
                     const std::string& remedy) const {
  const toml::node* node = inside_->here->get(key);
  std::string place;
  if (const auto line = (node != nullptr ? node : inside_->here)->source().begin.line; line > 0) {
    place = "line " + std::to_string(line) + ", ";
  }
  throw Error(inside_->path, place + (key.empty() ? inside_->name : inside_->full(key)), what,
              remedy);
}

void TomlTable::at(std::string_view key, const std::function<void()>& make) const {
  try {
    make();
  } catch (const Error& error) {
    if (!error.file().empty()) {
      throw;
    }
    fail(key, error.problem(), error.remedy());
  }
}

std::optional<double> TomlTable::number(std::string_view key, Range range) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  if (!node->is_number() || !inside(*node->value<double>(), range)) {
    fail(key, "must be " + in_words(range));
  }
  return node->value<double>();
}

std::optional<int> TomlTable::whole_number(std::string_view key, int low, int high) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  const auto value = node->value_exact<std::int64_t>();
  if (!value || *value < low || *value > high) {
    fail(key, "must be a whole number from " + std::to_string(low) + " to " + std::to_string(high));
  }
  return static_cast<int>(*value);
}

std::optional<bool> TomlTable::flag(std::string_view key) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  if (!node->is_boolean()) {
    fail(key, "must be true or false");
  }
  return node->value<bool>();
}

std::optional<std::string> TomlTable::text(std::string_view key) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  if (!node->is_string()) {
    fail(key, "must be text in quotation marks");
  }
  return node->value<std::string>();
}

std::optional<std::vector<double>> TomlTable::numbers(std::string_view key, Range range) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  const std::string wanted = "must be a list in brackets; each entry " + in_words(range);
  if (!node->is_array()) {
    fail(key, wanted);
  }
  std::vector<double> values;
  for (const toml::node& entry : *node->as_array()) {
    if (!entry.is_number() || !inside(*entry.value<double>(), range)) {
      fail(key, wanted, "entry " + std::to_string(values.size() + 1) + " is not");
    }
    values.push_back(*entry.value<double>());
  }
  return values;
}

std::optional<TomlTable> TomlTable::table(std::string_view key) {
  const toml::node* node = inside_->find(key);
  if (node == nullptr) {
    return std::nullopt;
  }
  if (!node->is_table()) {
    fail(key, "must be a table", "write [" + inside_->full(key) + "] on a line of its own");
  }
  auto in = std::make_shared<Inside>();
  in->root = inside_->root;
  in->here = node->as_table();
  in->path = inside_->path;
  in->name = inside_->full(key);
  return TomlTable(std::move(in));
}

void TomlTable::reject_unknown(const std::vector<std::string>& also_known) const {
  std::vector<std::string> known = inside_->known;
  known.insert(known.end(), also_known.begin(), also_known.end());
  for (const auto& [key, node] : *inside_->here) {
    const std::string_view word = key.str();
    if (std::find(known.begin(), known.end(), word) == known.end()) {
      fail(word, "unknown key '" + std::string(word) + "'",
           known.empty() ? std::string() : "did you mean '" + nearest_word(word, known) + "'?");
    }
  }
}

void TomlTable::reject(const std::vector<std::string>& keys, const std::string& why) const {
  for (const std::string& key : keys) {
    if (has(key)) {
      fail(key, why);
    }
  }
}

std::string toml_number(double value) {
  std::array<char, 32> buffer;
  const auto end = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value);
  return {buffer.data(), end.ptr};
}

std::string toml_numbers(const std::vector<double>& values) {
  std::string out = "[";
  for (std::size_t i = 0; i < values.size(); ++i) {
    out += (i > 0 ? ", " : "") + toml_number(values[i]);
  }
  return out + "]";
}

std::string toml_text(const std::string& text) {
  std::string out = "\"";
  for (const char c : text) {
    const auto byte = static_cast<unsigned char>(c);
    if (c == '"' || c == '\\') {
      out += '\\';
      out += c;
    } else if (byte < 0x20 || byte == 0x7f) {
      std::array<char, 8> buffer;
      std::snprintf(buffer.data(), buffer.size(), "\\u%04X", byte);
      out += buffer.data();
    } else {
      out += c;
    }
  }
  return out + "\"";
}

}  // namespace softsill

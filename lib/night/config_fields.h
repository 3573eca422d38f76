// How one key of the configuration is read, written and described: config.cc builds the
// table of options from it, and nobody else needs it.
#pragma once

#include <cmath>
#include <functional>
#include <map>
#include <nlohmann/json.hpp>
#include <optional>
#include <sstream>
#include <string>
#include <vector>

#define TOML_EXCEPTIONS 1
#include <toml++/toml.h>

namespace duskgrid::night {

using nlohmann::ordered_json;

// One key of a table whose values land in a Target.
template <class Target>
struct Field {
  std::string_view key;
  std::string range;  // what may stand there, for the manual and for messages
  std::string_view meaning;
  std::function<bool(Target&, const toml::node&)> read;  // false: not what may stand there
  std::function<ordered_json(const Target&)> write;
};

// Numbers that may be absent (NaN or no value) are null.
inline ordered_json to_json(double value) {
  return std::isfinite(value) ? ordered_json(value) : ordered_json(nullptr);
}
inline ordered_json to_json(const std::optional<double>& value) {
  return value ? to_json(*value) : ordered_json(nullptr);
}
// No letter is null.
inline ordered_json to_json(char value) {
  return value == 0 ? ordered_json(nullptr) : ordered_json(std::string(1, value));
}
template <class T>
ordered_json to_json(const T& value) {
  return ordered_json(value);
}

// Converters from a TOML node; nothing when the node is of another kind.
inline std::optional<double> to_number(const toml::node& node) {
  const auto value = node.value<double>();
  return value && std::isfinite(*value) && !node.is_boolean() ? value : std::nullopt;
}
inline std::optional<int> to_count(const toml::node& node) {
  constexpr std::int64_t kMost = 1'000'000'000;
  const auto value = node.value_exact<std::int64_t>();
  if (!value || *value < -kMost || *value > kMost) return std::nullopt;
  return static_cast<int>(*value);
}
// A date or time of TOML's own is taken as its text.
inline std::optional<std::string> to_text(const toml::node& node) {
  if (!node.is_date() && !node.is_date_time()) return node.value_exact<std::string>();
  std::ostringstream text;
  if (const auto* date = node.as_date()) text << *date;
  if (const auto* instant = node.as_date_time()) text << *instant;
  return text.str();
}
inline std::optional<bool> to_flag(const toml::node& node) { return node.value_exact<bool>(); }
inline std::optional<char> to_letter(const toml::node& node) {
  const auto text = to_text(node);
  return text && text->size() == 1 ? std::optional((*text)[0]) : std::nullopt;
}

template <class T, class Convert>
std::optional<std::vector<T>> to_list(const toml::node& node, Convert convert) {
  if (!node.is_array()) return std::nullopt;
  std::vector<T> values;
  for (const auto& item : *node.as_array()) {
    auto value = convert(item);
    if (!value) return std::nullopt;
    values.push_back(std::move(*value));
  }
  return values;
}
inline std::optional<std::vector<double>> to_numbers(const toml::node& node) {
  return to_list<double>(node, to_number);
}
// A list, or one text alone.
inline std::optional<std::vector<std::string>> to_texts(const toml::node& node) {
  if (auto one = to_text(node)) return std::vector<std::string>{*one};
  return to_list<std::string>(node, to_text);
}

template <class T, class Convert>
std::optional<std::map<std::string, T>> to_map(const toml::node& node, Convert convert) {
  if (!node.is_table()) return std::nullopt;
  std::map<std::string, T> values;
  for (const auto& [name, item] : *node.as_table()) {
    auto value = convert(item);
    if (!value) return std::nullopt;
    values[std::string(name.str())] = std::move(*value);
  }
  return values;
}
inline std::optional<std::map<std::string, double>> to_number_map(const toml::node& node) {
  return to_map<double>(node, to_number);
}
inline std::optional<std::map<std::string, std::string>> to_text_map(const toml::node& node) {
  return to_map<std::string>(node, to_text);
}

// A field kept at `get(target)`, converted by `convert`.
template <class Target, class Get, class Convert>
Field<Target> field(std::string_view key, std::string range, std::string_view meaning, Get get,
                    Convert convert) {
  return {key, std::move(range), meaning,
          [get, convert](Target& target, const toml::node& node) {
            auto value = convert(node);
            if (value) get(target) = std::move(*value);
            return value.has_value();
          },
          [get](const Target& target) { return to_json(get(target)); }};
}

}  // namespace duskgrid::night

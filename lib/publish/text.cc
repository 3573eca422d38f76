#include "publish/text.h"

#include <fmt/format.h>

#include <algorithm>
#include <charconv>
#include <cmath>
#include <iterator>

namespace duskgrid::publish {
namespace {

constexpr std::string_view kRunByASpreadsheet = "=+-@\t\r";

bool plain(char c) {
  return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') || (c >= '0' && c <= '9') || c == '_' ||
         c == '-';
}

bool run_by_a_spreadsheet(std::string_view text) {
  return !text.empty() && kRunByASpreadsheet.find(text.front()) != std::string_view::npos;
}

// Apostrophes and then what a spreadsheet would run: one more apostrophe is put on and taken off.
bool needs_guard(std::string_view text) {
  return run_by_a_spreadsheet(text.substr(std::min(text.find_first_not_of('\''), text.size())));
}

}  // namespace

std::string csv_text(std::string_view text) {
  std::string out = needs_guard(text) ? "'" : "";
  out += text;
  if (out.find_first_of(",\"\r\n") == std::string::npos) return out;
  std::string quoted = "\"";
  for (const char c : out) {
    if (c == '"') quoted += '"';
    quoted += c;
  }
  return quoted + '"';
}

std::string unguarded(std::string_view cell) {
  const bool guarded = cell.starts_with('\'') && needs_guard(cell);
  return std::string(guarded ? cell.substr(1) : cell);
}

bool csv_plain(std::string_view text) {
  return text.find_first_of(",\"\r\n") == std::string_view::npos && !needs_guard(text);
}

std::string csv_number(double value) {
  std::string text;
  add_csv_number(value, text);
  return text;
}

void add_csv_number(double value, std::string& to) {
  // Adding zero turns a negative zero into zero.
  if (std::isfinite(value)) fmt::format_to(std::back_inserter(to), "{}", value + 0.0);
}

std::string encode_file_name(std::string_view name) {
  if (name.empty()) return "%";
  std::string out;
  for (std::size_t i = 0; i < name.size(); ++i) {
    const bool inner_dot = name[i] == '.' && i > 0;
    if (plain(name[i]) || inner_dot)
      out += name[i];
    else
      out += fmt::format("%{:02X}", static_cast<unsigned char>(name[i]));
  }
  return out;
}

std::optional<std::string> decode_file_name(std::string_view file_name) {
  if (file_name == "%") return std::string();
  std::string out;
  for (std::size_t i = 0; i < file_name.size(); ++i) {
    if (file_name[i] != '%') {
      out += file_name[i];
      continue;
    }
    unsigned value = 0;
    const char* first = file_name.data() + i + 1;
    if (i + 2 >= file_name.size()) return std::nullopt;
    const auto [end, error] = std::from_chars(first, first + 2, value, 16);
    if (error != std::errc{} || end != first + 2) return std::nullopt;
    out += static_cast<char>(value);
    i += 2;
  }
  if (encode_file_name(out) != file_name) return std::nullopt;
  return out;
}

}  // namespace duskgrid::publish

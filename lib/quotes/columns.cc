#include "quotes/columns.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <set>
#include <utility>

#include "quotes/osi.h"
#include "quotes/spellings.h"

namespace duskgrid::quotes {
namespace {

// Headers listed in a message, and characters of each: a hostile file may have a
// hundred thousand columns.
constexpr std::size_t kHeadersListed = 60;
constexpr std::size_t kHeaderShown = 60;

// A header as a TOML basic string, so that the line shown can be pasted.
std::string toml_quoted(std::string_view text) {
  std::string quoted = "\"";
  for (const char c : text) {
    const auto byte = static_cast<unsigned char>(c);
    if (byte < 0x20 || byte == 0x7f) {
      quoted += fmt::format("\\u{:04X}", byte);
    } else {
      if (c == '"' || c == '\\') quoted += '\\';
      quoted += c;
    }
  }
  return quoted + '"';
}

// A header cut to what is shown of it, never inside a UTF-8 character.
std::string shown(const std::string& header) {
  if (header.size() <= kHeaderShown) return toml_quoted(header);
  std::size_t size = kHeaderShown;
  while (size > 0 && (static_cast<unsigned char>(header[size]) & 0xC0) == 0x80) --size;
  return toml_quoted(std::string_view(header).substr(0, size)) + "...";
}

std::string list_headers(const std::vector<std::string>& headers) {
  std::string list;
  for (std::size_t i = 0; i < headers.size() && i < kHeadersListed; ++i) {
    list += (i == 0 ? "" : ", ") + shown(headers[i]);
  }
  if (headers.size() > kHeadersListed) {
    list += fmt::format(" and {} more", headers.size() - kHeadersListed);
  }
  return list;
}

// One header row being mapped; each step leaves a failure or the slots' columns.
class Mapper {
 public:
  Mapper(const std::vector<std::string>& headers, const std::vector<std::string>& first_row,
         const std::map<std::string, std::string>& stated,
         const std::map<std::string, std::string>& fixed)
      : headers_(headers), first_row_(first_row), stated_(stated), fixed_(fixed) {}

  Result<ColumnMap> run(Layout layout) {
    std::optional<Failure> failure = read_fixed();
    if (!failure) failure = read_stated();
    if (failure) return *failure;
    recognise_headers();
    layout_ = layout == Layout::automatic ? find_layout() : layout;
    failure = refuse_slots_of_other_layout();
    if (failure) return *failure;
    keep_slots_of_layout();
    take_osi_symbols();
    failure = refuse_two_for_one();
    if (!failure) failure = refuse_missing();
    if (failure) return *failure;
    return result();
  }

 private:
  std::optional<Failure> read_fixed() {
    for (const auto& [word, text] : fixed_) {
      const auto slot = slot_of_word(word);
      if (!slot) return unknown_word("source.fixed", word);
      given_.insert(*slot);
    }
    return std::nullopt;
  }

  std::optional<Failure> read_stated() {
    for (const auto& [word, header] : stated_) {
      const auto slot = slot_of_word(word);
      if (!slot) return unknown_word("source.columns", word);
      const std::string where = "source.columns." + word;
      if (given_.contains(*slot)) {
        return Failure{Fault::configuration, where,
                       "given by [source.fixed] too; keep one of the two lines"};
      }
      const auto count = std::count(headers_.begin(), headers_.end(), header);
      if (count != 1) {
        return Failure{Fault::configuration, where,
                       fmt::format("{} columns are headed {}; columns found: {}; write\n"
                                   "[source.columns]\n{} = \"<header>\"",
                                   count == 0 ? "no" : std::to_string(count), toml_quoted(header),
                                   list_headers(headers_), word)};
      }
      const auto index = std::find(headers_.begin(), headers_.end(), header) - headers_.begin();
      columns_[*slot] = {static_cast<int>(index)};
      stated_slots_.insert(*slot);
      claimed_.insert(static_cast<int>(index));
    }
    return std::nullopt;
  }

  // What was stated wins: it is not looked for again, and its header serves nothing else.
  void recognise_headers() {
    for (int i = 0; i < static_cast<int>(headers_.size()); ++i) {
      if (claimed_.contains(i)) continue;
      const auto slot = recognise(headers_[i]);
      if (!slot || stated_slots_.contains(*slot) || given_.contains(*slot)) continue;
      columns_[*slot].push_back(i);
    }
  }

  bool has(Field field, Side side = Side::both) const {
    return columns_.contains({field, side}) || given_.contains({field, side});
  }

  bool quoted_on(Side side) const {
    return has(Field::bid, side) || has(Field::ask, side) || has(Field::bid_vol, side) ||
           has(Field::ask_vol, side) || has(Field::price, side);
  }

  Layout find_layout() const {
    const bool row_has_side = has(Field::put_call) || has(Field::osi_symbol);
    const bool both_sides = quoted_on(Side::call) && quoted_on(Side::put);
    return both_sides && !row_has_side ? Layout::call_put_per_row : Layout::contract_per_row;
  }

  bool in_layout(Slot slot) const {
    if (layout_ == Layout::contract_per_row) return slot.second == Side::both;
    if (slot.first == Field::put_call || slot.first == Field::osi_symbol) return false;
    return fields()[static_cast<std::size_t>(slot.first)].sided == (slot.second != Side::both);
  }

  // Who has written nothing about the file yet has no table for it either.
  std::string_view heading() const {
    return stated_.empty() && given_.empty() ? "[[source]]\n" : "";
  }

  std::optional<Failure> refuse_slots_of_other_layout() const {
    for (const auto* stated : {&stated_slots_, &given_}) {
      for (const Slot& slot : *stated) {
        if (in_layout(slot)) continue;
        return Failure{Fault::configuration, "source",
                       fmt::format("{} has no place in a file read as {}; columns found: {}; write "
                                   "layout = \"...\" or name the fields of that layout, such as\n"
                                   "[source.columns]\n{}bid = \"<header>\"",
                                   slot_word(slot), word(layout_), list_headers(headers_),
                                   layout_ == Layout::call_put_per_row ? "call_" : "")};
      }
    }
    return std::nullopt;
  }

  void keep_slots_of_layout() {
    std::erase_if(columns_, [&](const auto& column) { return !in_layout(column.first); });
  }

  // A column named like an underlying that holds whole contracts, where the file has no
  // other way to say the contract.
  void take_osi_symbols() {
    const bool spelled_out = has(Field::expiry) && has(Field::strike) && has(Field::put_call);
    const Slot name{Field::underlying, Side::both};
    const bool may_take = layout_ == Layout::contract_per_row && !spelled_out &&
                          !has(Field::osi_symbol) && columns_.contains(name) &&
                          !stated_slots_.contains(name);
    if (!may_take) return;
    std::vector<int>& names = columns_[name];
    const auto holds_osi = [&](int index) {
      return index < static_cast<int>(first_row_.size()) && parse_osi(first_row_[index]);
    };
    const auto symbols = std::stable_partition(names.begin(), names.end(),
                                               [&](int index) { return !holds_osi(index); });
    if (symbols != names.end()) {
      columns_[{Field::osi_symbol, Side::both}].assign(symbols, names.end());
    }
    names.erase(symbols, names.end());
    if (names.empty()) columns_.erase(name);
  }

  std::optional<Failure> refuse_two_for_one() const {
    for (const auto& [slot, indices] : columns_) {
      if (indices.size() < 2) continue;
      const std::string field = slot_word(slot);
      std::vector<std::string> fitting;
      for (const int i : indices) fitting.push_back(headers_[i]);
      const std::string& first = headers_[indices.front()];
      const bool same = std::count(headers_.begin(), headers_.end(), first) > 1;
      return Failure{
          fault(), field,
          fmt::format("{} columns fit: {}; columns found: {}; {}write which is meant into "
                      "a configuration\n{}[source.columns]\n{} = {}",
                      indices.size(), list_headers(fitting), list_headers(headers_),
                      same ? "give each its own header, or " : "", heading(), field,
                      same ? "\"<header>\"" : toml_quoted(first))};
    }
    return std::nullopt;
  }

  // Fields without which no row can be read, as far as they are absent.
  std::vector<Slot> missing() const {
    std::vector<Slot> absent;
    const auto need = [&](Field field, Side side) {
      if (!has(field, side)) absent.emplace_back(field, side);
    };
    const bool pairs = layout_ == Layout::call_put_per_row;
    if (pairs || !has(Field::osi_symbol)) {
      need(Field::underlying, Side::both);
      need(Field::expiry, Side::both);
      need(Field::strike, Side::both);
      if (!pairs) need(Field::put_call, Side::both);
    }
    const std::vector<Side> sides =
        pairs ? std::vector<Side>{Side::call, Side::put} : std::vector<Side>{Side::both};
    for (const Side side : sides) {
      if (has(Field::price, side) || (has(Field::bid_vol, side) && has(Field::ask_vol, side))) {
        continue;
      }
      const bool in_vols = has(Field::bid_vol, side) || has(Field::ask_vol, side);
      const bool in_prices = has(Field::bid, side) || has(Field::ask, side);
      need(in_vols && !in_prices ? Field::bid_vol : Field::bid, side);
      need(in_vols && !in_prices ? Field::ask_vol : Field::ask, side);
    }
    return absent;
  }

  std::optional<Failure> refuse_missing() const {
    const std::vector<Slot> absent = missing();
    if (absent.empty()) return std::nullopt;
    std::string names;
    std::string lines;
    std::string fixed_lines;
    for (const Slot& slot : absent) {
      const std::string field = slot_word(slot);
      names += (names.empty() ? "" : ", ") + field;
      lines += fmt::format("\n{} = \"<header>\"", field);
      const bool may_fix = slot.first == Field::underlying || slot.first == Field::expiry;
      if (may_fix) fixed_lines += fmt::format("\n{} = \"...\"", field);
    }
    if (!fixed_lines.empty()) {
      fixed_lines = "\nor, for what the file lacks,\n[source.fixed]" + fixed_lines;
    }
    return Failure{fault(), "columns",
                   fmt::format("no column for {}; columns found: {}; write which is meant into a "
                               "configuration\n{}[source.columns]{}{}",
                               names, list_headers(headers_), heading(), lines, fixed_lines)};
  }

  // A file that maps by itself or not at all is judged as a file; once a configuration
  // says what its columns are, the configuration is what does not fit.
  Fault fault() const {
    return stated_.empty() && fixed_.empty() ? Fault::not_quotes : Fault::configuration;
  }

  Failure unknown_word(const std::string& table, const std::string& word) const {
    return Failure{Fault::configuration, table,
                   fmt::format("no field is called {}; the nearest is {}; columns found: {}; "
                               "write\n[{}]\n{} = \"{}\"",
                               shown(word), nearest_word(word), list_headers(headers_), table,
                               nearest_word(word), table == "source.fixed" ? "..." : "<header>")};
  }

  ColumnMap result() const {
    ColumnMap map;
    map.layout = layout_;
    std::set<int> used;
    for (const auto& [slot, indices] : columns_) {
      const int index = indices.front();
      map.columns.push_back({slot.first, slot.second, index, headers_[index]});
      used.insert(index);
    }
    for (int i = 0; i < static_cast<int>(headers_.size()); ++i) {
      if (!used.contains(i) && !headers_[i].empty()) map.ignored.push_back(headers_[i]);
    }
    return map;
  }

  const std::vector<std::string>& headers_;
  const std::vector<std::string>& first_row_;
  const std::map<std::string, std::string>& stated_;
  const std::map<std::string, std::string>& fixed_;
  Layout layout_ = Layout::contract_per_row;
  std::map<Slot, std::vector<int>> columns_;  // all that fit, until two are refused
  std::set<Slot> stated_slots_;
  std::set<Slot> given_;   // outside the file
  std::set<int> claimed_;  // headers that were stated for some field
};

}  // namespace

std::string_view word(Layout layout) {
  constexpr std::array<std::string_view, 3> kWords{"automatic", "contract-per-row",
                                                   "call-put-per-row"};
  return kWords[static_cast<std::size_t>(layout)];
}

int ColumnMap::find(Field field, Side side) const {
  for (const Column& column : columns) {
    if (column.field == field && column.side == side) return column.index;
  }
  return -1;
}

Result<ColumnMap> map_columns(const std::vector<std::string>& headers,
                              const std::vector<std::string>& first_row, Layout layout,
                              const std::map<std::string, std::string>& stated,
                              const std::map<std::string, std::string>& fixed) {
  return Mapper(headers, first_row, stated, fixed).run(layout);
}

}  // namespace duskgrid::quotes

// What was read before need not be worked out again: a file of a million rows has a
// few thousand names and dates.
#pragma once

#include <chrono>
#include <cstdint>
#include <optional>
#include <string>
#include <string_view>
#include <unordered_map>
#include <utility>
#include <vector>

#include "quotes/instants.h"

namespace duskgrid::quotes {

// Numbers names in the order they are met; the names themselves stay in `names`.
class NameIndex {
 public:
  explicit NameIndex(std::vector<std::string>& names) : names_(names) {}
  std::int32_t index_of(std::string_view name);

 private:
  struct Hash {
    using is_transparent = void;
    std::size_t operator()(std::string_view text) const {
      return std::hash<std::string_view>{}(text);
    }
  };
  std::vector<std::string>& names_;
  std::int32_t last_ = -1;
  std::unordered_map<std::string, std::int32_t, Hash, std::equal_to<>> numbers_;
};

// The time of day that goes with a date cell.
struct TimeOfDay {
  std::chrono::seconds time{0};
  bool overrides = false;  // holds even when the cell states a time of its own
  bool operator==(const TimeOfDay&) const = default;
};

// Date cells as instants. `format` is that of parse_date_cell; nothing when the cell
// is no date.
class DateMemo {
 public:
  DateMemo(const Clock& clock, std::string format) : clock_(clock), format_(std::move(format)) {}
  DateMemo(const DateMemo&) = delete;
  DateMemo& operator=(const DateMemo&) = delete;
  std::optional<Instant> instant(std::string_view cell, const TimeOfDay& time);

 private:
  struct View {
    std::string_view text;
    TimeOfDay time;
  };
  struct Key {
    std::string text;
    TimeOfDay time;
    operator View() const { return {text, time}; }  // NOLINT(google-explicit-constructor)
  };
  struct Hash {
    using is_transparent = void;
    std::size_t operator()(const View& key) const;
  };
  struct Equal {
    using is_transparent = void;
    bool operator()(const View& a, const View& b) const {
      return a.time == b.time && a.text == b.text;
    }
  };
  std::optional<Instant> read(const View& key) const;

  Clock clock_;
  std::string format_;
  using Known = std::unordered_map<Key, std::optional<Instant>, Hash, Equal>;
  Known known_;
  const Known::value_type* last_ = nullptr;
};

}  // namespace duskgrid::quotes

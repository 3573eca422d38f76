#include "quotes/memo.h"

namespace duskgrid::quotes {
namespace {

// Texts remembered before starting over: more than the seconds of a day, so that quote
// times of one session all fit, and few enough to bound the memory of a hostile file.
constexpr std::size_t kRemembered = std::size_t{1} << 17;

// A longer cell is no date, and is not worth remembering.
constexpr std::size_t kLongestDate = 64;

}  // namespace

std::int32_t NameIndex::index_of(std::string_view name) {
  if (last_ >= 0 && names_[static_cast<std::size_t>(last_)] == name) return last_;
  const auto found = numbers_.find(name);
  if (found != numbers_.end()) return last_ = found->second;
  last_ = static_cast<std::int32_t>(names_.size());
  names_.emplace_back(name);
  numbers_.emplace(name, last_);
  return last_;
}

std::size_t DateMemo::Hash::operator()(const View& key) const {
  const auto time = static_cast<std::size_t>(2 * key.time.time.count() + key.time.overrides);
  return std::hash<std::string_view>{}(key.text) ^ (time * 0x9E3779B97F4A7C15U);
}

std::optional<Instant> DateMemo::instant(std::string_view cell, const TimeOfDay& time) {
  const View key{cell, time};
  if (last_ != nullptr && Equal{}(last_->first, key)) return last_->second;
  const auto found = known_.find(key);
  if (found != known_.end()) {
    last_ = &*found;
    return last_->second;
  }
  const std::optional<Instant> read_now = read(key);
  if (cell.size() > kLongestDate) return read_now;
  if (known_.size() >= kRemembered) known_.clear();
  last_ = &*known_.emplace(Key{std::string(cell), time}, read_now).first;
  return read_now;
}

std::optional<Instant> DateMemo::read(const View& key) const {
  std::optional<DateCell> cell = parse_date_cell(key.text, format_);
  if (!cell) return std::nullopt;
  // Unix seconds are an instant already: there is no date to put another time on.
  if (key.time.overrides && cell->date) cell->time_of_day = key.time.time;
  return resolve(*cell, clock_, key.time.time);
}

}  // namespace duskgrid::quotes

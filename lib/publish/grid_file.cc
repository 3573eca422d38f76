#include "publish/grid_file.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <exception>
#include <map>
#include <optional>
#include <string_view>
#include <utility>

#include "market/day_count.h"
#include "publish/text.h"
#include "quotes/columns.h"
#include "quotes/rows.h"

namespace duskgrid::publish {
namespace {

using arbitrage::VolNode;

enum Column { kAsOf, kUnderlying, kExpiry, kYears, kForward, kDiscount, kStrike, kVol };
constexpr std::array<std::string_view, 8> kNames{"as_of",         "underlying", "expiry",
                                                 "year_fraction", "forward",    "discount_factor",
                                                 "strike",        "vol"};

// The cells of a row by column, nothing where the file has no such column.
using Row = std::array<std::optional<std::string_view>, kNames.size()>;

// A row, or a header, that cannot be taken; the text says why.
struct Unusable {
  std::string why;
};

double positive_number(const Row& row, Column column) {
  const std::string_view cell = *row[column];
  double value = 0;
  const char* end = cell.data() + cell.size();
  const auto [stop, error] = std::from_chars(cell.data(), end, value);
  if (error != std::errc{} || stop != end || !std::isfinite(value) || value <= 0)
    throw Unusable{fmt::format("{} is '{}', must be a number > 0", kNames[column], cell)};
  return value;
}

double volatility(const Row& row) {
  constexpr double kMostVol = 20;
  const double vol = positive_number(row, kVol);
  if (vol > kMostVol)
    throw Unusable{fmt::format("vol is {}, must be decimals a year: 0.25 for 25 percent", vol)};
  return vol;
}

quotes::DateCell date_cell(std::string_view cell, Column column) {
  const auto date = quotes::parse_date_cell(cell);
  if (!date)
    throw Unusable{fmt::format("{} is '{}', must be a date or instant", kNames[column], cell)};
  return *date;
}

class GridBuilder {
 public:
  void add(const Row& row) {
    const arbitrage::VolSlice slice = slice_of(row);
    const VolNode node{positive_number(row, kStrike), volatility(row)};
    const std::string name = unguarded(row[kUnderlying].value_or(""));
    const auto key = std::pair(name, slice.year_fraction);
    auto& found = slices_.try_emplace(key, slice).first->second;
    if (found.forward != slice.forward || found.discount_factor != slice.discount_factor)
      throw Unusable{"forward or discount_factor differs from a line before of the same time"};
    found.nodes.push_back(node);
  }

  Result<GridFile> finish(const std::string& path) {
    GridFile file{clock_, {}};
    for (auto& [key, slice] : slices_) {
      auto& nodes = slice.nodes;
      std::sort(nodes.begin(), nodes.end(), [](const VolNode& a, const VolNode& b) {
        return std::pair(a.strike, a.vol) < std::pair(b.strike, b.vol);
      });
      const auto twice =
          std::adjacent_find(nodes.begin(), nodes.end(), [](const VolNode& a, const VolNode& b) {
            return a.strike == b.strike && a.vol != b.vol;
          });
      if (twice != nodes.end())
        return Failure{Fault::not_quotes, path,
                       fmt::format("strike {} has two volatilities at one expiry", twice->strike)};
      // A tenor may fall on a listed expiry.
      nodes.erase(
          std::unique(nodes.begin(), nodes.end(),
                      [](const VolNode& a, const VolNode& b) { return a.strike == b.strike; }),
          nodes.end());
      if (file.grids.empty() || file.grids.back().underlying != key.first)
        file.grids.push_back({key.first, {}});
      file.grids.back().slices.push_back(std::move(slice));
    }
    if (file.grids.empty()) return Failure{Fault::not_quotes, path, "holds no node"};
    return file;
  }

 private:
  // Rows come in runs of one date: the last reading is kept.
  quotes::DateCell dated(std::string& last, quotes::DateCell& cell, const Row& row, Column column) {
    const std::string_view text = *row[column];
    if (last.empty() || last != text) {
      cell = date_cell(text, column);
      last = text;
      if (cell.offset && !clock_known_) clock_.offset = *cell.offset;
      clock_known_ = clock_known_ || cell.offset;
    }
    return cell;
  }

  arbitrage::VolSlice slice_of(const Row& row) {
    constexpr auto kClose = std::chrono::hours{16};
    arbitrage::VolSlice slice{};
    slice.expiry = quotes::kNoInstant;
    quotes::Instant as_of = quotes::kNoInstant;
    if (row[kAsOf])
      as_of = quotes::resolve(dated(last_as_of_, as_of_cell_, row, kAsOf), clock_, kClose);
    if (row[kExpiry])
      slice.expiry =
          quotes::resolve(dated(last_expiry_, expiry_cell_, row, kExpiry), clock_, kClose);
    slice.year_fraction =
        row[kYears] ? positive_number(row, kYears) : market::year_fraction(as_of, slice.expiry);
    if (!(slice.year_fraction > 0)) throw Unusable{"expiry is not after as_of"};
    if (!row[kExpiry] && row[kAsOf]) slice.expiry = instant_after(as_of, slice.year_fraction);
    slice.forward = positive_number(row, kForward);
    slice.discount_factor = row[kDiscount] ? positive_number(row, kDiscount) : 1;
    return slice;
  }

  static quotes::Instant instant_after(quotes::Instant as_of, double year_fraction) {
    constexpr double kYear = 365.0 * 86400, kMostYears = 1000;
    const double seconds = std::min(year_fraction, kMostYears) * kYear;
    return as_of + std::chrono::seconds{std::llround(seconds)};
  }

  quotes::Clock clock_;
  bool clock_known_ = false;
  std::string last_as_of_, last_expiry_;
  quotes::DateCell as_of_cell_, expiry_cell_;
  std::map<std::pair<std::string, double>, arbitrage::VolSlice> slices_;
};

// Where each column stands in the file, -1 for none.
class Header {
 public:
  explicit Header(const std::vector<std::string_view>& cells) : width_(cells.size()) {
    places_.fill(-1);
    std::string found;
    for (std::size_t i = 0; i < cells.size(); ++i) {
      found += fmt::format("{}\"{}\"", i > 0 ? ", " : "", cells[i].substr(0, 40));
      for (std::size_t c = 0; c < kNames.size(); ++c)
        if (quotes::fold_header(cells[i]) == quotes::fold_header(kNames[c])) place(c, i);
    }
    for (const Column needed : {kStrike, kVol, kForward})
      if (!has(needed))
        throw Unusable{
            fmt::format("has no column '{}'; a grid needs strike, vol, forward and "
                        "year_fraction (or as_of and expiry); columns found: {}",
                        kNames[needed], found)};
    if (!has(kYears) && !(has(kAsOf) && has(kExpiry)))
      throw Unusable{"has neither year_fraction nor both as_of and expiry; columns found: " +
                     found};
  }

  Row row(const std::vector<std::string_view>& cells) const {
    if (cells.size() != width_)
      throw Unusable{fmt::format("has {} cells where the header has {}", cells.size(), width_)};
    Row row;
    for (std::size_t c = 0; c < row.size(); ++c)
      if (places_[c] >= 0) row[c] = cells[static_cast<std::size_t>(places_[c])];
    return row;
  }

 private:
  bool has(Column column) const { return places_[column] >= 0; }
  void place(std::size_t column, std::size_t at) {
    if (places_[column] >= 0) throw Unusable{fmt::format("has two columns '{}'", kNames[column])};
    places_[column] = static_cast<int>(at);
  }

  std::size_t width_;
  std::array<int, kNames.size()> places_;
};

void read_rows(quotes::RowReader& rows, GridBuilder& builder, std::int64_t& line) {
  std::vector<std::string_view> cells;
  quotes::Row row;
  const auto split = [&](char delimiter) {
    if (row.open_quote) throw Unusable{"a quotation mark is never closed"};
    quotes::split_row(row, delimiter, cells);
  };
  if (!rows.next(row)) throw Unusable{"holds no text"};
  const char delimiter = quotes::find_delimiter({row.text, row.size}, {});
  split(delimiter);
  const Header header(cells);
  while (rows.next(row)) {
    line = row.line;
    split(delimiter);
    builder.add(header.row(cells));
  }
}

}  // namespace

Result<GridFile> read_grid(const std::string& path) {
  const auto refuse = [&](const std::string& why) { return Failure{Fault::not_quotes, path, why}; };
  auto source = quotes::TextSource::open(path);
  if (!source) return source.failure();
  std::int64_t line = 0;
  try {
    quotes::RowReader rows(std::move(source.value()));
    GridBuilder builder;
    read_rows(rows, builder, line);
    if (auto stopped = rows.failure(path)) return *stopped;
    return builder.finish(path);
  } catch (const Unusable& unusable) {
    return refuse(line > 0 ? fmt::format("line {}: {}", line, unusable.why) : unusable.why);
  } catch (const std::exception& caught) {
    return refuse(fmt::format("after line {}: {}", line, caught.what()));
  }
}

}  // namespace duskgrid::publish

#include "publish/grid_file.h"

#include <fmt/format.h>

#include <algorithm>
#include <charconv>
#include <cmath>
#include <filesystem>
#include <limits>
#include <map>
#include <utility>

#define CSV_IO_NO_THREAD
#pragma GCC diagnostic push
// It cuts file names longer than its buffer for its messages, on purpose.
#pragma GCC diagnostic ignored "-Wstringop-truncation"
#include <libfccp/csv.h>
#pragma GCC diagnostic pop

#include "market/day_count.h"
#include "publish/text.h"

namespace duskgrid::publish {
namespace {

using arbitrage::VolNode;

struct Row {
  const char* as_of = nullptr;
  const char* underlying = nullptr;
  const char* expiry = nullptr;
  const char* year_fraction = nullptr;
  const char* forward = nullptr;
  const char* discount_factor = nullptr;
  const char* strike = nullptr;
  const char* vol = nullptr;
};

// A row that cannot be taken; the text says why.
struct BadRow {
  std::string why;
};

double positive_number(const char* cell, const char* name) {
  double value = 0;
  const char* end = cell + std::char_traits<char>::length(cell);
  const auto [stop, error] = std::from_chars(cell, end, value);
  if (error != std::errc{} || stop != end || !std::isfinite(value) || value <= 0)
    throw BadRow{fmt::format("{} is '{}', must be a number > 0", name, cell)};
  return value;
}

quotes::DateCell date_cell(const char* cell, const char* name) {
  const auto date = quotes::parse_date_cell(cell);
  if (!date) throw BadRow{fmt::format("{} is '{}', must be a date or instant", name, cell)};
  return *date;
}

class GridBuilder {
 public:
  void add(const Row& row) {
    const arbitrage::VolSlice slice = slice_of(row);
    const arbitrage::VolNode node{positive_number(row.strike, "strike"),
                                  positive_number(row.vol, "vol")};
    const std::string name = unguarded(row.underlying ? row.underlying : "");
    const auto key = std::pair(name, slice.year_fraction);
    auto& found = slices_.try_emplace(key, slice).first->second;
    if (found.forward != slice.forward || found.discount_factor != slice.discount_factor)
      throw BadRow{"forward or discount_factor differs from a line before of the same time"};
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
  quotes::DateCell dated(std::string& last, quotes::DateCell& cell, const char* text,
                         const char* name) {
    if (last.empty() || last != text) {
      cell = date_cell(text, name);
      last = text;
      if (cell.offset && !clock_known_) clock_.offset = *cell.offset;
      clock_known_ = clock_known_ || cell.offset;
    }
    return cell;
  }

  arbitrage::VolSlice slice_of(const Row& row) {
    constexpr auto kClose = std::chrono::hours{16};
    arbitrage::VolSlice slice{};
    quotes::Instant as_of = quotes::kNoInstant;
    if (row.as_of)
      as_of = quotes::resolve(dated(last_as_of_, as_of_cell_, row.as_of, "as_of"), clock_, kClose);
    if (row.expiry)
      slice.expiry =
          quotes::resolve(dated(last_expiry_, expiry_cell_, row.expiry, "expiry"), clock_, kClose);
    slice.year_fraction = row.year_fraction ? positive_number(row.year_fraction, "year_fraction")
                                            : market::year_fraction(as_of, slice.expiry);
    if (!(slice.year_fraction > 0)) throw BadRow{"expiry is not after as_of"};
    if (!row.expiry) slice.expiry = instant_after(as_of, slice.year_fraction);
    slice.forward = positive_number(row.forward, "forward");
    slice.discount_factor =
        row.discount_factor ? positive_number(row.discount_factor, "discount_factor") : 1;
    return slice;
  }

  static quotes::Instant instant_after(quotes::Instant as_of, double year_fraction) {
    const auto start = as_of == quotes::kNoInstant ? quotes::Instant{} : as_of;
    constexpr double kYear = 365.0 * 86400, kMostYears = 1000;
    const double seconds = std::min(year_fraction, kMostYears) * kYear;
    return start + std::chrono::seconds{std::llround(seconds)};
  }

  quotes::Clock clock_;
  bool clock_known_ = false;
  std::string last_as_of_, last_expiry_;
  quotes::DateCell as_of_cell_, expiry_cell_;
  std::map<std::pair<std::string, double>, arbitrage::VolSlice> slices_;
};

}  // namespace

Result<GridFile> read_grid(const std::string& path) {
  const auto refuse = [&](const std::string& why) { return Failure{Fault::not_quotes, path, why}; };
  std::error_code error;
  if (!std::filesystem::is_regular_file(path, error))
    return Failure{Fault::no_input, path, "is missing or not a file"};
  unsigned line = 0;
  try {
    io::CSVReader<8, io::trim_chars<' '>, io::double_quote_escape<',', '"'>> reader(path);
    reader.read_header(io::ignore_extra_column | io::ignore_missing_column, "as_of", "underlying",
                       "expiry", "year_fraction", "forward", "discount_factor", "strike", "vol");
    for (const char* needed : {"strike", "vol", "forward"})
      if (!reader.has_column(needed))
        return refuse(
            fmt::format("has no column '{}'; a grid needs strike, vol, forward and "
                        "year_fraction (or as_of and expiry)",
                        needed));
    const bool dated = reader.has_column("as_of") && reader.has_column("expiry");
    if (!dated && !reader.has_column("year_fraction"))
      return refuse("has neither year_fraction nor both as_of and expiry");
    GridBuilder builder;
    Row row;
    while (reader.read_row(row.as_of, row.underlying, row.expiry, row.year_fraction, row.forward,
                           row.discount_factor, row.strike, row.vol)) {
      line = reader.get_file_line();
      builder.add(row);
    }
    return builder.finish(path);
  } catch (const BadRow& bad) {
    return refuse(fmt::format("line {}: {}", line, bad.why));
  } catch (const std::exception& caught) {
    return refuse(fmt::format("after line {}: {}", line, caught.what()));
  }
}

}  // namespace duskgrid::publish

#include "publish/points_file.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <exception>
#include <string_view>
#include <tuple>
#include <utility>

#include "publish/text.h"
#include "quotes/cells.h"
#include "quotes/columns.h"
#include "quotes/rows.h"

namespace duskgrid::publish {
namespace {

enum Column { kUnderlying, kExpiry, kTenor, kStrike, kMoneyness, kLogMoneyness, kPutCall };
constexpr std::array<std::string_view, 7> kNames{"underlying", "expiry",        "tenor",   "strike",
                                                 "moneyness",  "log_moneyness", "put_call"};

// A row, or a header, that cannot be taken; the text says why.
struct Unusable {
  std::string why;
};

double number_of(std::string_view cell, Column column) {
  double value = 0;
  const char* end = cell.data() + cell.size();
  const auto [stop, error] = std::from_chars(cell.data(), end, value);
  if (error != std::errc{} || stop != end)
    throw Unusable{fmt::format("{} is '{}', must be a number", kNames[column], cell)};
  return value;
}

// Where each column stands in the file, and the axis that its points are on.
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
    if (!has(kExpiry) && !has(kTenor))
      throw Unusable{"has no column expiry or tenor; columns found: " + found};
    const auto used =
        std::find_if(kAxes.begin(), kAxes.end(), [&](const auto& axis) { return has(axis.first); });
    if (used == kAxes.end())
      throw Unusable{"has no column strike, moneyness or log_moneyness; columns found: " + found};
    std::tie(point_, axis_) = *used;
  }

  WantedPoint point(const std::vector<std::string_view>& cells) const {
    if (cells.size() != width_)
      throw Unusable{fmt::format("has {} cells where the header has {}", cells.size(), width_)};
    const auto cell = [&](Column c) {
      return has(c) ? cells[static_cast<std::size_t>(places_[c])] : std::string_view();
    };
    WantedPoint out{0,
                    unguarded(cell(kUnderlying)),
                    std::string(cell(kExpiry)),
                    std::string(cell(kTenor)),
                    {axis_, number_of(cell(point_), point_)}};
    if (out.expiry.empty() && out.tenor.empty()) throw Unusable{"has neither expiry nor tenor"};
    if (const auto problem = problem_of(out.point))
      throw Unusable{fmt::format("{} is '{}', {}", kNames[point_], cell(point_), *problem)};
    if (const auto side = cell(kPutCall); !side.empty()) {
      out.point.put_call = quotes::parse_put_call(side);
      if (!out.point.put_call)
        throw Unusable{fmt::format("put_call is '{}', must be C or P", side)};
    }
    return out;
  }

 private:
  static constexpr std::array<std::pair<Column, Axis>, 3> kAxes{
      {{kStrike, Axis::strike},
       {kMoneyness, Axis::moneyness},
       {kLogMoneyness, Axis::log_moneyness}}};

  bool has(Column column) const { return places_[column] >= 0; }
  void place(std::size_t column, std::size_t at) {
    if (places_[column] >= 0) throw Unusable{fmt::format("has two columns '{}'", kNames[column])};
    places_[column] = static_cast<int>(at);
  }

  std::size_t width_;
  std::array<int, kNames.size()> places_;
  Column point_ = kStrike;
  Axis axis_ = Axis::strike;
};

std::vector<WantedPoint> read_rows(quotes::RowReader& rows, std::int64_t& line) {
  std::vector<std::string_view> cells;
  quotes::Row row;
  if (!rows.next(row)) throw Unusable{"holds no text"};
  const char delimiter = quotes::find_delimiter({row.text, row.size}, {});
  const auto split = [&] {
    if (row.open_quote) throw Unusable{"a quotation mark is never closed"};
    quotes::split_row(row, delimiter, cells);
  };
  split();
  const Header header(cells);
  std::vector<WantedPoint> points;
  while (rows.next(row)) {
    line = row.line;
    split();
    points.push_back(header.point(cells));
    points.back().line = line;
  }
  return points;
}

}  // namespace

Result<std::vector<WantedPoint>> read_points(const std::string& path) {
  const auto refuse = [&](const std::string& why) { return Failure{Fault::not_quotes, path, why}; };
  auto source = quotes::TextSource::open(path);
  if (!source) return source.failure();
  std::int64_t line = 0;
  try {
    quotes::RowReader rows(std::move(source.value()));
    auto points = read_rows(rows, line);
    if (auto stopped = rows.failure(path)) return *stopped;
    if (points.empty()) return refuse("holds no point");
    return points;
  } catch (const Unusable& unusable) {
    return refuse(line > 0 ? fmt::format("line {}: {}", line, unusable.why) : unusable.why);
  } catch (const std::exception& caught) {
    return refuse(fmt::format("after line {}: {}", line, caught.what()));
  }
}

}  // namespace duskgrid::publish

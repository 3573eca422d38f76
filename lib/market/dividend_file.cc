#include "market/dividend_file.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <exception>
#include <utility>

#include "quotes/columns.h"
#include "quotes/rows.h"

namespace duskgrid::market {
namespace {

enum Column { kUnderlying, kExDate, kAmount, kKind };
constexpr std::array<std::string_view, 4> kNames{"underlying", "ex_date", "amount", "kind"};

// A row, or a header, that cannot be taken; the text says why.
struct Unusable {
  std::string why;
};

using Cells = std::vector<std::string_view>;

class Header {
 public:
  explicit Header(const Cells& cells) : width_(cells.size()) {
    places_.fill(-1);
    for (std::size_t i = 0; i < cells.size(); ++i)
      for (std::size_t c = 0; c < kNames.size(); ++c)
        if (quotes::fold_header(cells[i]) == quotes::fold_header(kNames[c])) place(c, i);
    for (const Column needed : {kUnderlying, kExDate, kAmount})
      if (places_[needed] < 0)
        throw Unusable{fmt::format(
            "has no column {}; a dividend file has underlying, ex_date, amount and perhaps kind",
            kNames[needed])};
  }

  std::string_view cell(const Cells& cells, Column c) const {
    if (cells.size() != width_)
      throw Unusable{fmt::format("has {} cells where the header has {}", cells.size(), width_)};
    return places_[c] < 0 ? std::string_view() : cells[static_cast<std::size_t>(places_[c])];
  }

 private:
  void place(std::size_t column, std::size_t at) {
    if (places_[column] >= 0) throw Unusable{fmt::format("has two columns '{}'", kNames[column])};
    places_[column] = static_cast<int>(at);
  }

  std::size_t width_;
  std::array<int, kNames.size()> places_{};
};

double amount_of(std::string_view cell) {
  double value = 0;
  const char* end = cell.data() + cell.size();
  const auto [stop, error] = std::from_chars(cell.data(), end, value);
  if (error != std::errc{} || stop != end)
    throw Unusable{fmt::format("amount is '{}', must be a number", cell)};
  return value;
}

void take(const Header& header, const Cells& cells, const quotes::Clock& clock,
          DividendTable& table) {
  const auto name = header.cell(cells, kUnderlying);
  if (name.empty()) throw Unusable{"has no underlying"};
  const auto date = quotes::parse_date_cell(header.cell(cells, kExDate));
  if (!date)
    throw Unusable{fmt::format("ex_date is '{}', must be a date such as 2031-05-02",
                               header.cell(cells, kExDate))};
  auto kind = std::optional(DividendKind::cash);
  if (const auto text = header.cell(cells, kKind); !text.empty()) kind = parse_dividend_kind(text);
  if (!kind)
    throw Unusable{
        fmt::format("kind is '{}', must be cash or proportional", header.cell(cells, kKind))};
  const double amount = amount_of(header.cell(cells, kAmount));
  if (const auto problem = amount_problem(*kind, amount)) throw Unusable{*problem};
  const DatedDividend read{ex_instant(*date, clock), *kind, amount};
  auto& known = table[std::string(name)];
  // Twice the same, a row sent twice, would move every forward behind it.
  if (std::find(known.begin(), known.end(), read) != known.end())
    throw Unusable{"the same dividend stands twice"};
  known.push_back(read);
}

}  // namespace

std::optional<DividendKind> parse_dividend_kind(std::string_view text) {
  for (const auto kind : {DividendKind::cash, DividendKind::proportional})
    if (quotes::fold_header(text) == word(kind)) return kind;
  return std::nullopt;
}

std::optional<std::string> amount_problem(DividendKind kind, double amount) {
  if (!(amount >= 0 && std::isfinite(amount)))
    return fmt::format("amount is {}, must be >= 0", amount);
  if (kind == DividendKind::proportional && !(amount < 1))
    return fmt::format("amount is {}, a share of the spot must be below 1", amount);
  return std::nullopt;
}

quotes::Instant ex_instant(const quotes::DateCell& date, const quotes::Clock& clock) {
  return quotes::resolve(date, clock, std::chrono::seconds{0});
}

Result<DividendFile> read_dividends(const std::string& path, const quotes::Clock& clock) {
  const auto refuse = [&](std::int64_t line, const std::string& why) {
    return Failure{Fault::not_quotes, path, line > 0 ? fmt::format("line {}: {}", line, why) : why};
  };
  auto source = quotes::TextSource::open(path);
  if (!source) return source.failure();
  std::int64_t line = 0;
  try {
    quotes::RowReader rows(std::move(source.value()));
    quotes::Row row;
    if (!rows.next(row)) throw Unusable{"holds no text"};
    const char delimiter = quotes::find_delimiter({row.text, row.size}, {});
    Cells cells;
    const auto split = [&] {
      if (row.open_quote) throw Unusable{"a quotation mark is never closed"};
      quotes::split_row(row, delimiter, cells);
    };
    split();
    const Header header(cells);
    DividendFile out;
    while (rows.next(row)) {
      line = row.line;
      split();
      take(header, cells, clock, out.table);
      ++out.rows;
    }
    if (auto stopped = rows.failure(path)) return *stopped;
    return out;
  } catch (const Unusable& unusable) {
    return refuse(line, unusable.why);
  } catch (const std::exception& caught) {
    return refuse(line, caught.what());
  }
}

}  // namespace duskgrid::market

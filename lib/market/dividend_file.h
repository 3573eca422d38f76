// Reading dividends from CSV.
#pragma once

#include <map>
#include <string>
#include <vector>

#include "market/dividends.h"
#include "quotes/instants.h"
#include "quotes/result.h"

namespace duskgrid::market {

// Dividends by underlying, in the order of the file.
using DividendTable = std::map<std::string, std::vector<DatedDividend>>;

struct DividendFile {
  DividendTable table;
  std::int64_t rows = 0;
};

// "cash" or "proportional", in any case.
std::optional<DividendKind> parse_dividend_kind(std::string_view text);
// Nothing when an amount is one that a dividend of that kind can have, else what is wrong.
std::optional<std::string> amount_problem(DividendKind kind, double amount);
// A dividend is gone from the first moment of its ex date on the clock.
quotes::Instant ex_instant(const quotes::DateCell& date, const quotes::Clock& clock);

// Columns underlying, ex_date, amount, and kind where there (cash without it). Failure: no_input
// for a missing file, not_quotes with the line for anything that is not such a file: a dividend
// misread in silence would move every forward behind it.
Result<DividendFile> read_dividends(const std::string& path, const quotes::Clock& clock);

}  // namespace duskgrid::market

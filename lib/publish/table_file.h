// Reading the CSV tables of a run folder back (RFC 4180 as tables.h writes it). Not for the files
// of others: quotes/rows.h.
#pragma once

#include <cstdint>
#include <functional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::publish {

// A row: the physical line it starts on (header 1) and the cells of the columns asked for, in the
// order asked, without quotation marks and as guarded as in the file. They last for the call.
using TakeRow = std::function<void(std::int64_t line, std::span<const std::string_view> cells)>;

// Gives every row to `take`, in order; holds one at a time. Failures: no_input when the file cannot
// be read; not_quotes, with the line, for a column that is not there, a row of another width or
// past 1 MiB, and a quotation mark that is never closed.
Result<bool> read_table(const std::string& path, const std::vector<std::string_view>& columns,
                        const TakeRow& take);

}  // namespace duskgrid::publish

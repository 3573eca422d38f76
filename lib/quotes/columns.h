// Finding which column of a file is which field. Not for reading the cells: load.h.
#pragma once

#include <map>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/result.h"

namespace duskgrid::quotes {

enum class Layout { automatic, contract_per_row, call_put_per_row };
std::string_view word(Layout layout);

// Every field a column can carry. In a call-put row the quote fields come once for
// each side, as call_bid, put_bid and so on.
enum class Field {
  underlying,
  expiry,
  expiry_time,
  strike,
  put_call,
  osi_symbol,
  bid,
  ask,
  bid_vol,
  ask_vol,
  price,
  bid_size,
  ask_size,
  volume,
  open_interest,
  quote_time,
  underlying_price,
  underlying_bid,
  underlying_ask,
  exercise,
  settlement,
  multiplier,
  currency,
};
inline constexpr int kFieldCount = 23;
enum class Side { both, call, put };  // `both` for fields that belong to the row

struct FieldEntry {
  Field field;
  std::string_view word;                    // as written in the configuration: "bid_size"
  bool sided;                               // comes once a side in a call-put row
  std::vector<std::string_view> spellings;  // ordinary words of the trade, already folded
};
// The one table of fields and spellings, in the order of the enumeration.
std::span<const FieldEntry> fields();

// A header cell folded for comparison: lower case, spaces . _ - ( ) [ ] removed.
std::string fold_header(std::string_view header);

struct Column {
  Field field;
  Side side;
  int index;           // position in the row, from 0
  std::string header;  // as the file writes it
};

struct ColumnMap {
  Layout layout = Layout::contract_per_row;
  std::vector<Column> columns;
  std::vector<std::string> ignored;  // headers that carry no field
  // Position of a field, -1 when the file has none.
  int find(Field field, Side side = Side::both) const;
};

// Maps a header row. `stated` is field word (bid, call_bid, ...) to header as
// written, and wins; `fixed` names the fields given outside the file. A needed
// field with no column, two columns for one field, an unknown field word or a
// stated header that is absent is a failure whose text lists the headers found and
// shows the mapping line to write in the configuration. When `first_row` shows OSI
// symbols in a column read as `underlying` and expiry, strike or put_call are
// missing, that column is taken as osi_symbol.
Result<ColumnMap> map_columns(const std::vector<std::string>& headers,
                              const std::vector<std::string>& first_row, Layout layout,
                              const std::map<std::string, std::string>& stated,
                              const std::map<std::string, std::string>& fixed);

}  // namespace duskgrid::quotes

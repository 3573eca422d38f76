// From the cells of a row to its contracts: one Quote, or two for a call-put row. Not
// for splitting rows (rows.h) nor for judging quotes (clean.h).
#pragma once

#include <array>
#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "quotes/cells.h"
#include "quotes/columns.h"
#include "quotes/load.h"
#include "quotes/memo.h"
#include "quotes/osi.h"
#include "quotes/quote.h"
#include "quotes/result.h"

namespace duskgrid::quotes {

// Why a contract is unreadable, or a remark on one that is not.
enum class Note : std::uint8_t {
  none,
  open_quote,
  cell_count,
  no_underlying,
  bad_underlying,
  no_expiry,
  bad_expiry,
  bad_expiry_time,
  no_strike,
  bad_strike,
  strike_not_positive,
  no_put_call,
  bad_put_call,
  bad_symbol,
  bad_bid,
  bad_ask,
  bad_bid_vol,
  bad_ask_vol,
  bad_price,
  bad_exercise,
  unknown_settlement,
  bad_quote_time,
};
inline constexpr std::size_t kNoteCount = 22;
std::string_view text(Note note);

// Quotes on their way into a table: their names and notes are numbered among themselves. A note is
// a Note, or kNoteCount and the number of cells of a row that has not as many as the header.
struct ContractBatch {
  std::vector<Quote> quotes;
  std::vector<std::string> names;
  std::int64_t rows = 0;
  std::int64_t unreadable = 0;  // contracts
};

// Reads rows of one file. Several readers may read parts of one file at the same time.
class ContractReader {
 public:
  ContractReader(const SourceOptions& options, const TimeRules& rules, const ColumnMap& columns,
                 std::size_t header_cells);

  // A fixed value that no row could use, or a price column without a half-spread.
  std::optional<Failure> problem() const;

  // Quotes that each row becomes.
  int contracts_per_row() const { return contracts_per_row_; }

  // Adds the quotes of a row. `cells` is changed and restored.
  void add_row(std::vector<std::string_view>& cells, std::int32_t file, std::int64_t line);
  // Adds quotes for a row that could not be split.
  void add_unreadable(Note note, std::int32_t file, std::int64_t line);

  // What was added since the last call.
  ContractBatch take();

 private:
  // Where the fields of one side stand in a row, -1 for those absent. Fixed values
  // come behind the cells of the file.
  struct SideColumns {
    std::array<int, kFieldCount> index;
    QuotedIn quoted_in = QuotedIn::price;
    bool from_price = false;    // bid and ask are made from one price
    bool needs_symbol = false;  // the symbol carries part of the contract
    int at(Field field) const { return index[static_cast<std::size_t>(field)]; }
    bool has(Field field) const { return at(field) >= 0; }
  };
  SideColumns side_columns(const ColumnMap& columns, Side side) const;
  std::optional<Failure> problem_with_fixed(const std::string& word, const std::string& text) const;

  std::string_view cell(Field field) const;
  double optional_number(Field field, double scale = 1) const;
  bool read_number(Field field, double scale, double& to) const;

  Note read_contract(Quote& quote);
  Note read_symbol();
  Note read_underlying(Quote& quote);
  Note read_put_call(Quote& quote) const;
  Note read_strike(Quote& quote) const;
  Note read_expiry(Quote& quote);
  Note read_time_of_day(TimeOfDay& time);
  Note read_exercise(Quote& quote) const;
  Note read_quotes(Quote& quote) const;
  Note read_price(Quote& quote) const;
  void read_extras(Quote& quote);
  double read_underlying_price() const;
  void mark_unreadable(Quote& quote, std::int32_t note) const;

  const SourceOptions& options_;
  ContractBatch batch_;
  struct Names {
    std::vector<std::string> names;
    NameIndex index{names};
  };
  std::optional<Names> names_;  // of the batch
  CellRules rules_;
  std::map<std::string, std::chrono::seconds> settlement_times_;
  std::chrono::seconds default_time_;
  DateMemo expiries_, quote_times_, plain_dates_;

  std::size_t header_cells_;
  int contracts_per_row_;
  std::vector<std::string_view> fixed_;
  std::array<SideColumns, 2> sides_;  // the second for the put of a call-put row

  // The row being read.
  const std::vector<std::string_view>* cells_ = nullptr;
  const SideColumns* side_ = nullptr;
  std::optional<OsiSymbol> symbol_;
};

// Puts the batches of one file into the table, in the order of the file: then names and notes are
// numbered in the order they are met there.
class BatchMerger {
 public:
  BatchMerger(QuoteTable& table, NameIndex& names, std::size_t header_cells);
  void merge(const ContractBatch& batch);

 private:
  std::int32_t note_number(std::int32_t note);
  std::int32_t numbered(Note note);

  QuoteTable& table_;
  NameIndex& names_;
  std::size_t header_cells_;
  std::array<std::int32_t, kNoteCount> notes_;
  std::map<std::size_t, std::int32_t> cell_counts_;
  std::vector<std::int32_t> batch_names_;  // number in the table by number in the batch
};

}  // namespace duskgrid::quotes

#include "quotes/contracts.h"

#include <algorithm>
#include <cmath>
#include <utility>

#include "quotes/spellings.h"

namespace duskgrid::quotes {
namespace {

// An adjusted contract is of the name before the digit that marks it (common practice), so that
// it is accounted for there and not as a name of its own.
std::string_view underlying_of(const OsiSymbol& symbol) {
  std::string_view root = symbol.root;
  const auto last_letter = root.find_last_not_of("0123456789");
  if (symbol.adjusted && last_letter != std::string_view::npos)
    root = root.substr(0, last_letter + 1);
  return root;
}

constexpr std::array<std::string_view, kNoteCount> kTexts{
    "",
    "a quotation mark is never closed",
    "wrong number of cells",
    "no underlying",
    "underlying is no name of 1 to 80 bytes without control characters",
    "no expiry",
    "expiry is not a date",
    "expiry time is not a time of day",
    "no strike",
    "strike is not a number",
    "strike is not above zero",
    "no put or call",
    "neither put nor call",
    "symbol is not an OSI symbol",
    "bid is not a number",
    "ask is not a number",
    "bid vol is not a number",
    "ask vol is not a number",
    "price is not a number",
    "exercise is neither European nor American",
    "settlement word has no time; the default time holds",
    "quote time cannot be read",
};

// Rows of wrong length come in few lengths; a file that has more is no such CSV, and
// its notes then say less.
constexpr std::size_t kCellCountNotes = 32;

std::int32_t number_of(Note note) { return static_cast<std::int32_t>(note); }

double zero_if_absent(double value) { return std::isnan(value) ? 0 : value; }

std::map<std::string, std::chrono::seconds> folded(
    const std::map<std::string, std::chrono::seconds>& times) {
  std::map<std::string, std::chrono::seconds> result;
  for (const auto& [word, time] : times) result.emplace(fold_word(word), time);
  return result;
}

// "20310620", which every date memo without a format reads.
std::string compact_date(std::chrono::year_month_day date) {
  const int number = static_cast<int>(date.year()) * 10000 +
                     static_cast<int>(static_cast<unsigned>(date.month())) * 100 +
                     static_cast<int>(static_cast<unsigned>(date.day()));
  return std::to_string(number);
}

}  // namespace

std::string_view text(Note note) { return kTexts[static_cast<std::size_t>(note)]; }

ContractReader::ContractReader(const SourceOptions& options, const TimeRules& rules,
                               const ColumnMap& columns, std::size_t header_cells)
    : options_(options),
      rules_(options.decimal,
             options.thousands != 0   ? options.thousands
             : options.decimal == ',' ? '.'
                                      : ',',
             options.null_words,
             options.thousands == 0 && options.decimal == '.' && options.delimiter != ','),
      settlement_times_(folded(rules.settlement_times)),
      default_time_(rules.default_time),
      expiries_(rules.clock, options.date_format),
      quote_times_(rules.clock, options.date_format),
      plain_dates_(rules.clock, {}),
      header_cells_(header_cells),
      contracts_per_row_(columns.layout == Layout::call_put_per_row ? 2 : 1) {
  for (const auto& [word, value] : options.fixed) fixed_.push_back(trim(value));
  const bool pairs = contracts_per_row_ == 2;
  sides_[0] = side_columns(columns, pairs ? Side::call : Side::both);
  sides_[1] = side_columns(columns, pairs ? Side::put : Side::both);
}

ContractReader::SideColumns ContractReader::side_columns(const ColumnMap& columns,
                                                         Side side) const {
  SideColumns found;
  found.index.fill(-1);
  int place = static_cast<int>(header_cells_);
  for (const auto& [word, value] : options_.fixed) {
    const std::optional<Slot> slot = slot_of_word(word);
    const bool ours = slot && (slot->second == side || slot->second == Side::both);
    if (ours) found.index[static_cast<std::size_t>(slot->first)] = place;
    ++place;
  }
  for (std::size_t i = 0; i < kFieldCount; ++i) {
    const Field field = static_cast<Field>(i);
    const int own = columns.find(field, side);
    const int column = own >= 0 ? own : columns.find(field);
    if (column >= 0) found.index[i] = column;
  }
  const bool in_prices = found.has(Field::bid) && found.has(Field::ask);
  const bool in_vols = found.has(Field::bid_vol) && found.has(Field::ask_vol);
  if (!in_prices && in_vols) found.quoted_in = QuotedIn::vol;
  found.from_price = !in_prices && !in_vols;
  found.needs_symbol =
      found.has(Field::osi_symbol) && !(found.has(Field::underlying) && found.has(Field::expiry) &&
                                        found.has(Field::strike) && found.has(Field::put_call));
  return found;
}

std::optional<Failure> ContractReader::problem_with_fixed(const std::string& word,
                                                          const std::string& value) const {
  const std::string_view cell = trim(value);
  const std::optional<Slot> slot = slot_of_word(word);
  const auto unless = [&](bool sound, std::string_view what) -> std::optional<Failure> {
    if (sound) return std::nullopt;
    return Failure{Fault::configuration, "source.fixed." + word,
                   "\"" + value + "\" is not " + std::string(what)};
  };
  if (!slot) return unless(false, "the value of any field");
  switch (slot->first) {
    case Field::underlying: return unless(is_name(cell), "a name of 1 to 80 bytes");
    case Field::expiry:
    case Field::quote_time:
      return unless(parse_date_cell(cell, options_.date_format).has_value(), "a date");
    case Field::expiry_time: return unless(parse_time_of_day(cell).has_value(), "a time of day");
    case Field::put_call: return unless(parse_put_call(cell).has_value(), "put or call");
    case Field::osi_symbol: return unless(parse_osi(cell).has_value(), "an OSI symbol");
    case Field::exercise: return unless(parse_exercise(cell).has_value(), "European or American");
    case Field::settlement:
      return unless(settlement_times_.contains(fold_word(cell)), "a word with a settlement time");
    case Field::currency: return std::nullopt;
    default: return unless(rules_.number(cell).has_value(), "a number");
  }
}

std::optional<Failure> ContractReader::problem() const {
  for (const auto& [word, value] : options_.fixed) {
    if (auto failure = problem_with_fixed(word, value)) return failure;
  }
  const bool spread =
      !std::isnan(options_.half_spread_absolute) || !std::isnan(options_.half_spread_relative);
  if (spread || !sides_[0].from_price) return std::nullopt;
  return Failure{Fault::configuration, "source",
                 "the file has a price but no bid and ask; state the spread to assume, such as\n"
                 "half_spread_relative = 0.02"};
}

// Of an unreadable contract only where it stood is kept: part of a contract would
// read like a whole one.
void ContractReader::mark_unreadable(Quote& quote, std::int32_t note) const {
  Quote unreadable;
  unreadable.file = quote.file;
  unreadable.line = quote.line;
  unreadable.reason = Reason::unreadable;
  unreadable.note = note;
  quote = unreadable;
}

void ContractReader::add_unreadable(Note note, std::int32_t file, std::int64_t line) {
  for (int i = 0; i < contracts_per_row_; ++i) {
    Quote& quote = batch_.quotes.emplace_back();
    quote.file = file;
    quote.line = line;
    mark_unreadable(quote, number_of(note));
  }
  ++batch_.rows;
  batch_.unreadable += contracts_per_row_;
}

void ContractReader::add_row(std::vector<std::string_view>& cells, std::int32_t file,
                             std::int64_t line) {
  const std::size_t own_cells = cells.size();
  const bool sound = own_cells == header_cells_;
  if (!names_) names_.emplace();
  cells.insert(cells.end(), fixed_.begin(), fixed_.end());
  cells_ = &cells;
  for (int i = 0; i < contracts_per_row_; ++i) {
    side_ = &sides_[static_cast<std::size_t>(i)];
    Quote& quote = batch_.quotes.emplace_back();
    quote.file = file;
    quote.line = line;
    quote.put_call = i == 0 ? PutCall::call : PutCall::put;
    const Note note = sound ? read_contract(quote) : Note::cell_count;
    if (note == Note::none) continue;
    mark_unreadable(quote,
                    sound ? number_of(note) : static_cast<std::int32_t>(kNoteCount + own_cells));
    ++batch_.unreadable;
  }
  ++batch_.rows;
  cells.resize(own_cells);
}

ContractBatch ContractReader::take() {
  if (names_) batch_.names = std::move(names_->names);
  names_.reset();
  ContractBatch taken = std::exchange(batch_, {});
  // The next batch is about as large, and growing to that size costs more than reading a row.
  batch_.quotes.reserve(taken.quotes.size() + taken.quotes.size() / 8);
  return taken;
}

Note ContractReader::read_contract(Quote& quote) {
  Note note = read_symbol();
  if (note == Note::none) note = read_underlying(quote);
  if (note == Note::none) note = read_expiry(quote);
  if (note == Note::none) note = read_strike(quote);
  if (note == Note::none) note = read_put_call(quote);
  if (note == Note::none) note = read_exercise(quote);
  if (note == Note::none) note = read_quotes(quote);
  if (note == Note::none) read_extras(quote);
  return note;
}

std::string_view ContractReader::cell(Field field) const {
  const int index = side_->at(field);
  if (index < 0) return {};
  const std::string_view found = (*cells_)[static_cast<std::size_t>(index)];
  return rules_.is_null(found) ? std::string_view() : found;
}

// False for a cell that is there and is no number of a finite double after its scale.
bool ContractReader::read_number(Field field, double scale, double& to) const {
  const std::string_view found = cell(field);
  if (found.empty()) return true;
  const std::optional<double> number = rules_.number(found);
  if (!number || !std::isfinite(*number * scale)) return false;
  to = *number * scale;
  return true;
}

double ContractReader::optional_number(Field field, double scale) const {
  double value = kAbsent;
  return read_number(field, scale, value) ? value : kAbsent;
}

Note ContractReader::read_symbol() {
  if (!side_->has(Field::osi_symbol)) return Note::none;
  symbol_ = parse_osi(cell(Field::osi_symbol));
  return symbol_ || !side_->needs_symbol ? Note::none : Note::bad_symbol;
}

Note ContractReader::read_underlying(Quote& quote) {
  const bool own = side_->has(Field::underlying);
  const std::string_view name = own ? cell(Field::underlying) : underlying_of(*symbol_);
  if (name.empty()) return Note::no_underlying;
  if (!is_name(name)) return Note::bad_underlying;
  quote.underlying = names_->index.index_of(name);
  quote.adjusted = symbol_ && symbol_->adjusted;
  return Note::none;
}

Note ContractReader::read_put_call(Quote& quote) const {
  if (contracts_per_row_ == 2) return Note::none;  // the place in the row says it
  if (!side_->has(Field::put_call)) {
    quote.put_call = symbol_->put_call;
    return Note::none;
  }
  const std::string_view word = cell(Field::put_call);
  if (word.empty()) return Note::no_put_call;
  const std::optional<PutCall> read = parse_put_call(word);
  if (!read) return Note::bad_put_call;
  quote.put_call = *read;
  return Note::none;
}

Note ContractReader::read_strike(Quote& quote) const {
  if (!side_->has(Field::strike)) {
    quote.strike = symbol_->strike;
  } else if (!read_number(Field::strike, options_.strike_scale, quote.strike)) {
    return Note::bad_strike;
  }
  if (std::isnan(quote.strike)) return Note::no_strike;
  return quote.strike > 0 ? Note::none : Note::strike_not_positive;
}

// The time of day that goes with an expiry date: stated by a column, else that of the
// settlement word, else the default.
Note ContractReader::read_time_of_day(TimeOfDay& time) {
  time.time = default_time_;
  if (const std::string_view stated = cell(Field::expiry_time); !stated.empty()) {
    const auto read = parse_time_of_day(stated);
    if (!read) return Note::bad_expiry_time;
    time = {*read, true};
    return Note::none;
  }
  const std::string_view settlement = cell(Field::settlement);
  if (settlement.empty()) return Note::none;
  const auto known = settlement_times_.find(fold_word(settlement));
  if (known == settlement_times_.end()) return Note::unknown_settlement;
  time.time = known->second;
  return Note::none;
}

Note ContractReader::read_expiry(Quote& quote) {
  TimeOfDay time;
  const Note note = read_time_of_day(time);
  if (note == Note::bad_expiry_time) return note;
  if (note != Note::none) quote.note = number_of(note);
  std::optional<Instant> instant;
  if (side_->has(Field::expiry)) {
    const std::string_view date = cell(Field::expiry);
    if (date.empty()) return Note::no_expiry;
    instant = expiries_.instant(date, time);
  } else {
    instant = plain_dates_.instant(compact_date(symbol_->expiry), time);
  }
  if (!instant) return Note::bad_expiry;
  quote.expiry = *instant;
  return Note::none;
}

Note ContractReader::read_exercise(Quote& quote) const {
  quote.exercise = options_.exercise.value_or(Exercise::european);
  const std::string_view word = cell(Field::exercise);
  if (word.empty()) return Note::none;
  const std::optional<Exercise> read = parse_exercise(word);
  if (!read) return Note::bad_exercise;
  quote.exercise = *read;
  return Note::none;
}

Note ContractReader::read_quotes(Quote& quote) const {
  quote.quoted_in = side_->quoted_in;
  if (side_->from_price) return read_price(quote);
  if (side_->quoted_in == QuotedIn::price) {
    if (!read_number(Field::bid, options_.price_scale, quote.bid)) return Note::bad_bid;
    if (!read_number(Field::ask, options_.price_scale, quote.ask)) return Note::bad_ask;
    return Note::none;
  }
  if (!read_number(Field::bid_vol, options_.vol_scale, quote.bid)) return Note::bad_bid_vol;
  if (!read_number(Field::ask_vol, options_.vol_scale, quote.ask)) return Note::bad_ask_vol;
  return Note::none;
}

Note ContractReader::read_price(Quote& quote) const {
  double price = kAbsent;
  if (!read_number(Field::price, options_.price_scale, price)) return Note::bad_price;
  if (std::isnan(price)) return Note::none;
  const double half_spread = zero_if_absent(options_.half_spread_absolute) +
                             zero_if_absent(options_.half_spread_relative) * price;
  if (!std::isfinite(price - half_spread) || !std::isfinite(price + half_spread)) {
    return Note::bad_price;
  }
  quote.bid = std::max(price - half_spread, 0.0);
  quote.ask = price + half_spread;
  return Note::none;
}

// What no contract needs: absent when it cannot be read.
void ContractReader::read_extras(Quote& quote) {
  quote.bid_size = optional_number(Field::bid_size);
  quote.ask_size = optional_number(Field::ask_size);
  quote.volume = optional_number(Field::volume);
  quote.open_interest = optional_number(Field::open_interest);
  quote.multiplier = optional_number(Field::multiplier);
  quote.underlying_price = read_underlying_price();
  const std::string_view time = cell(Field::quote_time);
  if (time.empty()) return;
  const TimeOfDay of_day{default_time_, false};
  std::optional<Instant> instant = quote_times_.instant(time, of_day);
  // A format stated for expiries need not be that of quote times.
  if (!instant && !options_.date_format.empty()) instant = plain_dates_.instant(time, of_day);
  quote.quote_time = instant.value_or(kNoInstant);
  if (!instant && !rules_.is_null(time)) quote.note = number_of(Note::bad_quote_time);
}

double ContractReader::read_underlying_price() const {
  double price = optional_number(Field::underlying_price, options_.price_scale);
  if (std::isnan(price) && side_->has(Field::underlying_bid)) {
    price = 0.5 * optional_number(Field::underlying_bid, options_.price_scale) +
            0.5 * optional_number(Field::underlying_ask, options_.price_scale);
  }
  return price > 0 ? price : kAbsent;
}

BatchMerger::BatchMerger(QuoteTable& table, NameIndex& names, std::size_t header_cells)
    : table_(table), names_(names), header_cells_(header_cells) {
  notes_.fill(-1);
}

void BatchMerger::merge(const ContractBatch& batch) {
  batch_names_.clear();
  for (const std::string& name : batch.names) batch_names_.push_back(names_.index_of(name));
  for (const Quote& read : batch.quotes) {
    Quote& quote = table_.quotes.emplace_back(read);
    if (quote.underlying >= 0)
      quote.underlying = batch_names_[static_cast<std::size_t>(quote.underlying)];
    if (quote.note >= 0) quote.note = note_number(quote.note);
  }
}

std::int32_t BatchMerger::numbered(Note note) {
  std::int32_t& number = notes_[static_cast<std::size_t>(note)];
  if (number < 0) number = table_.note_index(std::string(text(note)));
  return number;
}

std::int32_t BatchMerger::note_number(std::int32_t note) {
  if (note < static_cast<std::int32_t>(kNoteCount)) return numbered(static_cast<Note>(note));
  const std::size_t cells = static_cast<std::size_t>(note) - kNoteCount;
  const auto known = cell_counts_.find(cells);
  if (known != cell_counts_.end()) return known->second;
  if (cell_counts_.size() >= kCellCountNotes) return numbered(Note::cell_count);
  const std::int32_t number =
      table_.note_index(std::to_string(cells) + (cells == 1 ? " cell" : " cells") +
                        ", header has " + std::to_string(header_cells_));
  cell_counts_.emplace(cells, number);
  return number;
}

}  // namespace duskgrid::quotes

#include "quotes/spellings.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <numeric>
#include <vector>

namespace duskgrid::quotes {
namespace {

constexpr std::size_t kLettersCompared = 60;

const FieldEntry& entry(Field field) { return fields()[static_cast<std::size_t>(field)]; }

std::vector<Slot> all_slots() {
  std::vector<Slot> slots;
  for (const FieldEntry& f : fields()) {
    slots.emplace_back(f.field, Side::both);
    if (!f.sided) continue;
    slots.emplace_back(f.field, Side::call);
    slots.emplace_back(f.field, Side::put);
  }
  return slots;
}

// Letters to change, add or drop to make one word of the other (Levenshtein).
std::size_t edit_distance(std::string_view a, std::string_view b) {
  std::vector<std::size_t> row(b.size() + 1);
  std::iota(row.begin(), row.end(), std::size_t{0});
  for (std::size_t i = 0; i < a.size(); ++i) {
    std::size_t diagonal = std::exchange(row[0], i + 1);
    for (std::size_t j = 0; j < b.size(); ++j) {
      const std::size_t changed = diagonal + (a[i] == b[j] ? 0 : 1);
      diagonal = row[j + 1];
      row[j + 1] = std::min({changed, row[j] + 1, diagonal + 1});
    }
  }
  return row.back();
}

bool is_separator(char c) { return std::string_view(" ._-()[]").find(c) != std::string_view::npos; }

std::optional<Field> field_of_spelling(std::string_view folded, bool only_sided) {
  for (const FieldEntry& f : fields()) {
    if (only_sided && !f.sided) continue;
    if (std::find(f.spellings.begin(), f.spellings.end(), folded) != f.spellings.end()) {
      return f.field;
    }
  }
  return std::nullopt;
}

// What tells the side at an end of a header. Single letters and plurals count only
// between separators, else "price" would be the "rice" of a put.
struct Mark {
  std::string_view word;
  Side side;
  bool needs_separator;
};
constexpr std::array<Mark, 6> kMarks{{{"calls", Side::call, true},
                                      {"call", Side::call, false},
                                      {"c", Side::call, true},
                                      {"puts", Side::put, true},
                                      {"put", Side::put, false},
                                      {"p", Side::put, true}}};

// The words of a header between separators, folded.
std::vector<std::string> header_words(std::string_view header) {
  std::vector<std::string> words(1);
  for (const char c : header) {
    if (!is_separator(c)) {
      words.back() += fold_header(std::string_view(&c, 1));
    } else if (!words.back().empty()) {
      words.emplace_back();
    }
  }
  if (words.back().empty()) words.pop_back();
  return words;
}

std::optional<Slot> sided_slot(std::string_view header) {
  const std::string folded = fold_header(header);
  const std::vector<std::string> words = header_words(header);
  if (words.empty()) return std::nullopt;
  for (const Mark& mark : kMarks) {
    const std::size_t n = mark.word.size();
    const bool leads =
        mark.needs_separator ? words.front() == mark.word : folded.starts_with(mark.word);
    const bool trails =
        mark.needs_separator ? words.back() == mark.word : folded.ends_with(mark.word);
    std::optional<Field> field;
    if (leads) field = field_of_spelling(std::string_view(folded).substr(n), true);
    if (!field && trails) {
      field = field_of_spelling(std::string_view(folded).substr(0, folded.size() - n), true);
    }
    if (field) return Slot{*field, mark.side};
  }
  return std::nullopt;
}

}  // namespace

// Left out on purpose: "root" (the symbol's, not the underlying's), "vol" (volume or
// volatility), "close" and "last" (trades, which may be hours older than the quotes),
// "date" (of the quote or of the expiry).
std::span<const FieldEntry> fields() {
  static const std::array<FieldEntry, kFieldCount> kFields{{
      {Field::underlying,
       "underlying",
       false,
       {"underlying", "symbol", "underlyingsymbol", "underlyingticker", "underlyingname",
        "underlyingasset", "underlier", "ticker"}},
      {Field::expiry,
       "expiry",
       false,
       {"expiry", "expirydate", "expiration", "expirationdate", "expires", "exp", "expdate",
        "maturity", "maturitydate"}},
      {Field::expiry_time,
       "expiry_time",
       false,
       {"expirytime", "expirationtime", "exptime", "maturitytime"}},
      {Field::strike, "strike", false, {"strike", "strikeprice", "strikepx", "exerciseprice", "k"}},
      {Field::put_call,
       "put_call",
       false,
       {"putcall", "callput", "put/call", "call/put", "putorcall", "callorput", "cp", "pc", "c/p",
        "p/c", "cpflag", "pcflag", "putcallflag", "callputflag", "optiontype", "optionright",
        "right", "type"}},
      {Field::osi_symbol,
       "osi_symbol",
       false,
       {"osisymbol", "osi", "osicode", "optionsymbol", "contractsymbol"}},
      {Field::bid,
       "bid",
       true,
       {"bid", "bidprice", "bidpx", "bidquote", "bestbid", "bestbidprice"}},
      {Field::ask,
       "ask",
       true,
       {"ask", "askprice", "askpx", "askquote", "bestask", "bestaskprice", "offer", "offerprice",
        "offerpx", "bestoffer", "bestofferprice"}},
      {Field::bid_vol,
       "bid_vol",
       true,
       {"bidvol", "bidiv", "bidvolatility", "bidimpliedvol", "bidimpliedvolatility", "ivbid",
        "volbid", "impliedbid"}},
      {Field::ask_vol,
       "ask_vol",
       true,
       {"askvol", "askiv", "askvolatility", "askimpliedvol", "askimpliedvolatility", "ivask",
        "volask", "impliedask", "offervol", "offeriv", "offervolatility", "ivoffer", "voloffer",
        "impliedoffer"}},
      {Field::price,
       "price",
       true,
       {"price", "mid", "midprice", "midpoint", "settle", "settleprice", "settlementprice",
        "settlprice"}},
      {Field::bid_size,
       "bid_size",
       true,
       {"bidsize", "bidsz", "bidqty", "bidquantity", "bestbidsize"}},
      {Field::ask_size,
       "ask_size",
       true,
       {"asksize", "asksz", "askqty", "askquantity", "bestasksize", "offersize", "offersz",
        "offerqty", "offerquantity", "bestoffersize"}},
      {Field::volume, "volume", true, {"volume", "tradevolume", "tradedvolume", "totalvolume"}},
      {Field::open_interest, "open_interest", true, {"openinterest", "openint", "oi"}},
      {Field::quote_time,
       "quote_time",
       false,
       {"quotetime", "quotedatetime", "quotetimestamp", "timestamp", "datetime", "time"}},
      {Field::underlying_price,
       "underlying_price",
       false,
       {"underlyingprice", "underlyingpx", "underlyinglast", "underlyingmid", "underlierprice",
        "spot", "spotprice"}},
      {Field::underlying_bid,
       "underlying_bid",
       false,
       {"underlyingbid", "underlyingbidprice", "underlierbid", "spotbid"}},
      {Field::underlying_ask,
       "underlying_ask",
       false,
       {"underlyingask", "underlyingaskprice", "underlyingoffer", "underlierask", "spotask",
        "spotoffer"}},
      {Field::exercise,
       "exercise",
       false,
       {"exercise", "exercisestyle", "exercisetype", "optionstyle", "style"}},
      {Field::settlement,
       "settlement",
       false,
       {"settlement", "settlementtype", "settlementstyle", "settletype", "settlestyle"}},
      {Field::multiplier,
       "multiplier",
       false,
       {"multiplier", "contractmultiplier", "contractsize", "lotsize"}},
      {Field::currency, "currency", false, {"currency", "currencycode", "quotecurrency", "ccy"}},
  }};
  return kFields;
}

std::string fold_header(std::string_view header) {
  std::string folded;
  for (const char c : header) {
    if (is_separator(c)) continue;
    folded += c >= 'A' && c <= 'Z' ? static_cast<char>(c - 'A' + 'a') : c;
  }
  return folded;
}

std::string slot_word(Slot slot) {
  constexpr std::array<std::string_view, 3> kPrefixes{"", "call_", "put_"};
  return fmt::format("{}{}", kPrefixes[static_cast<std::size_t>(slot.second)],
                     entry(slot.first).word);
}

std::optional<Slot> slot_of_word(std::string_view word) {
  for (const Slot& slot : all_slots()) {
    if (slot_word(slot) == word) return slot;
  }
  return std::nullopt;
}

std::string nearest_word(std::string_view word) {
  const std::string_view start = word.substr(0, kLettersCompared);
  std::string nearest;
  std::size_t least = std::string::npos;
  for (const Slot& slot : all_slots()) {
    std::string candidate = slot_word(slot);
    const std::size_t distance = edit_distance(start, candidate);
    if (distance >= least) continue;
    least = distance;
    nearest = std::move(candidate);
  }
  return nearest;
}

std::optional<Slot> recognise(std::string_view header) {
  const std::optional<Field> plain = field_of_spelling(fold_header(header), false);
  if (plain) return Slot{*plain, Side::both};
  return sided_slot(header);
}

}  // namespace duskgrid::quotes

// The plain structs every stage works on: one Quote a contract read, in a
// QuoteTable that owns the names the quotes refer to by index.
#pragma once

#include <chrono>
#include <cstdint>
#include <limits>
#include <string>
#include <vector>

#include "quotes/ledger.h"

namespace duskgrid::quotes {

using Instant = std::chrono::sys_seconds;  // UTC, to the second

inline constexpr double kAbsent = std::numeric_limits<double>::quiet_NaN();
inline constexpr Instant kNoInstant = Instant::min();

enum class PutCall : std::uint8_t { call, put };
enum class Exercise : std::uint8_t { european, american };
enum class QuotedIn : std::uint8_t { price, vol };

// One contract as read, and what became of it. An absent number is kAbsent (NaN),
// never printed; an unreadable quote has underlying -1 when its name is unknown.
struct Quote {
  std::int32_t file = -1;        // index into QuoteTable::files
  std::int64_t line = 0;         // physical line in that file, header 1
  std::int32_t underlying = -1;  // index into QuoteTable::underlyings
  PutCall put_call = PutCall::call;
  Exercise exercise = Exercise::european;
  QuotedIn quoted_in = QuotedIn::price;
  bool adjusted = false;  // an adjusted contract: its OSI root ends in a digit
  Reason reason = Reason::none;
  std::int32_t note = -1;  // index into QuoteTable::notes, -1 for none
  Instant expiry = kNoInstant;
  Instant quote_time = kNoInstant;
  double strike = kAbsent;  // quote currency, after the stated scale
  double bid = kAbsent;     // price in quote currency, or vol in decimals a year
  double ask = kAbsent;
  double bid_size = kAbsent;  // contracts
  double ask_size = kAbsent;
  double volume = kAbsent;
  double open_interest = kAbsent;
  double underlying_price = kAbsent;
  double multiplier = kAbsent;
  // Filled by later stages; vols in decimals a year.
  double vol_bid = kAbsent;  // 0 for a bid at or below intrinsic
  double vol_mid = kAbsent;
  double vol_ask = kAbsent;
  double vol_fit = kAbsent;
  double miss = kAbsent;  // signed distance outside the spread, half-spreads of vol
};

struct QuoteTable {
  std::vector<Quote> quotes;             // in the order read: by file, then line, call before put
  std::vector<std::string> underlyings;  // exactly as written in the files, UTF-8
  std::vector<std::string> files;        // as named by the user (after glob expansion)
  std::vector<std::string> notes;        // few-word remarks, shared between rows

  // Index of a note, adding it when new (linear in the number of distinct notes).
  std::int32_t note_index(const std::string& text);
};

inline double mid(const Quote& q) { return 0.5 * (q.bid + q.ask); }

}  // namespace duskgrid::quotes

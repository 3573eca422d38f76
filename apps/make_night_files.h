// How quotes are written: one function for each habit of file, and the compressed or
// plain bytes on disk. Not for what the quotes say: make_night_quotes.h.
#pragma once

#include <filesystem>
#include <string>
#include <vector>

#include "make_night_quotes.h"

namespace duskgrid::make_night {

enum class Packing : std::uint8_t { plain, gzip, zstd };

struct NightFile {
  std::string name;
  std::string text;  // before packing
  Packing packing = Packing::plain;
};

// Contract per row under the ordinary words, settlement am or pm.
std::string index_text(const std::vector<MadeQuote>& quotes);
// Contract per row: byte-order mark, semicolons, CRLF, words of its own; strikes of a
// thousand and more are quoted with a thousands separator. Damage shows here.
std::string shares_text(const std::vector<MadeQuote>& quotes, const AsOf& as_of);
// Call and put of one strike side by side, sides after a dot; NA for a bid of zero and
// n.q. for an absent price. Takes whole pairs, call first, of one name and expiry.
std::string ladder_text(const std::vector<MadeQuote>& quotes);
// Contract per row keyed by a 21-character symbol, times in Unix seconds.
std::string symbols_text(const std::vector<MadeQuote>& quotes);
// Contract per row in volatility: semicolons, decimal commas, worded dates, percent.
std::string vols_text(const std::vector<MadeQuote>& quotes);
// One settlement price a contract, strikes in hundredths, compact dates.
std::string settlements_text(const std::vector<MadeQuote>& quotes);

// The planted faults of a file as tab-separated lines: file, line, put_call,
// underlying, expiry, strike, kind, expected. `quotes_a_line` is 2 for a ladder.
std::string planted_lines(const std::string& file, const std::vector<MadeQuote>& quotes,
                          std::size_t quotes_a_line);

// Writes the file, replacing what was there; false when it cannot. Packed bytes carry
// no time and no name, so that the same night packs to the same bytes.
bool store(const std::filesystem::path& folder, const NightFile& file);

}  // namespace duskgrid::make_night

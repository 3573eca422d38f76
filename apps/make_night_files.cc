#include "make_night_files.h"

#if defined(__GNUC__) && !defined(__clang__)
// GCC 12 sees an overlap that cannot happen in std::string::replace (its bug 105651)
// where the gzip filter appends to its header.
#pragma GCC diagnostic ignored "-Wrestrict"
#endif

#include <fmt/format.h>

#include <boost/iostreams/device/array.hpp>
#include <boost/iostreams/filter/gzip.hpp>
#include <boost/iostreams/filter/zstd.hpp>
#include <boost/iostreams/filtering_stream.hpp>
#include <fstream>
#include <iterator>

namespace duskgrid::make_night {
namespace {

namespace chrono = std::chrono;

std::string cell(const std::optional<Cents>& price, char point = '.') {
  return price ? decimals(*price, point) : "";
}

std::string letter(Side side) { return side == Side::call ? "C" : "P"; }

std::string local_time(std::int64_t unix, const AsOf& as_of) {
  const chrono::sys_seconds local{chrono::seconds{unix} + as_of.offset};
  const auto date = chrono::floor<chrono::days>(local);
  const chrono::hh_mm_ss clock{local - date};
  return fmt::format("{} {:02}:{:02}:{:02}", iso_date(Date{date}), clock.hours().count(),
                     clock.minutes().count(), clock.seconds().count());
}

std::string share_strike(const MadeQuote& quote) {
  switch (quote.damage) {
    case Damage::no_strike: return "";
    case Damage::words_for_strike: return "see notice";
    default: break;
  }
  return quote.strike >= 100'000 ? fmt::format("\"{}\"", grouped(quote.strike))
                                 : decimals(quote.strike);
}

std::string share_row(const MadeQuote& quote, const AsOf& as_of) {
  const std::string expiry =
      quote.damage == Damage::impossible_date
          ? fmt::format("{:04}-02-30", static_cast<int>(quote.expiry.date.year()))
          : iso_date(quote.expiry.date);
  std::string row = fmt::format("{};{};{}", quote.underlying, expiry, share_strike(quote));
  if (quote.damage == Damage::cut_short) return row;
  row += fmt::format(";{};{};{};{};{};{};{}", quote.side == Side::call ? "Call" : "Put",
                     cell(quote.bid), cell(quote.ask), quote.bid_size, quote.ask_size, quote.volume,
                     quote.open_interest);
  row += fmt::format(";{};{};European;{}", local_time(quote.quoted, as_of), decimals(quote.spot),
                     quote.multiplier);
  return row;
}

std::string ladder_price(const std::optional<Cents>& price) {
  if (!price) return "n.q.";
  return *price == 0 ? "NA" : decimals(*price);
}

// Root padded to 6, yymmdd, C or P, strike in thousandths in 8 digits.
std::string osi_symbol(const MadeQuote& quote) {
  return fmt::format("{:<6}{}{}{:08}", quote.underlying, compact_date(quote.expiry.date).substr(2),
                     letter(quote.side), quote.strike * 10);
}

std::string packed(const NightFile& file) {
  namespace io = boost::iostreams;
  if (file.packing == Packing::plain) return file.text;
  io::filtering_istream stream;
  if (file.packing == Packing::gzip) {
    io::gzip_params params;
    params.mtime = 0;
    stream.push(io::gzip_compressor(params));
  } else {
    stream.push(io::zstd_compressor());
  }
  stream.push(io::array_source(file.text.data(), file.text.size()));
  return {std::istreambuf_iterator<char>(stream), std::istreambuf_iterator<char>()};
}

}  // namespace

std::string index_text(const std::vector<MadeQuote>& quotes) {
  std::string text =
      "underlying,expiry,settlement,strike,put_call,bid,ask,bid_size,ask_size,volume,"
      "open_interest\n";
  for (const MadeQuote& q : quotes) {
    text += fmt::format("{},{},{},{},{},{},{},{},{},{},{}\n", q.underlying, iso_date(q.expiry.date),
                        q.expiry.settled == Settled::morning ? "am" : "pm", decimals(q.strike),
                        letter(q.side), cell(q.bid), cell(q.ask), q.bid_size, q.ask_size, q.volume,
                        q.open_interest);
  }
  return text;
}

std::string shares_text(const std::vector<MadeQuote>& quotes, const AsOf& as_of) {
  std::string text =
      "\xEF\xBB\xBF"
      "Share;Expires;Strike;Which;Bid;Ask;BidLots;AskLots;Traded;Held;Quoted;Spot;Style;Lot\r\n";
  for (const MadeQuote& q : quotes) text += share_row(q, as_of) + "\r\n";
  return text;
}

std::string ladder_text(const std::vector<MadeQuote>& quotes) {
  std::string text = "lots.call,bid.call,ask.call,strike,bid.put,ask.put,lots.put\n";
  for (std::size_t i = 0; i + 1 < quotes.size(); i += 2) {
    const MadeQuote& call = quotes[i];
    const MadeQuote& put = quotes[i + 1];
    text += fmt::format("{},{},{},{},{},{},{}\n", call.volume, ladder_price(call.bid),
                        ladder_price(call.ask), decimals(call.strike), ladder_price(put.bid),
                        ladder_price(put.ask), put.volume);
  }
  return text;
}

std::string symbols_text(const std::vector<MadeQuote>& quotes) {
  std::string text = "contract,bid,ask,bid_size,ask_size,stamp\n";
  for (const MadeQuote& q : quotes) {
    text += fmt::format("{},{},{},{},{},{}\n", osi_symbol(q), cell(q.bid), cell(q.ask), q.bid_size,
                        q.ask_size, q.quoted);
  }
  return text;
}

std::string vols_text(const std::vector<MadeQuote>& quotes) {
  std::string text = "Name;Runs to;Strike;Right;Vol bid;Vol ask\n";
  for (const MadeQuote& q : quotes) {
    text += fmt::format("{};{};{};{};{};{}\n", q.underlying, worded_date(q.expiry.date),
                        decimals(q.strike, ','), q.side == Side::call ? "call" : "put",
                        cell(q.bid, ','), cell(q.ask, ','));
  }
  return text;
}

std::string settlements_text(const std::vector<MadeQuote>& quotes) {
  std::string text = "product,expiry,strike,put_call,settle,open_interest\n";
  for (const MadeQuote& q : quotes) {
    text += fmt::format("{},{},{},{},{},{}\n", q.underlying, compact_date(q.expiry.date), q.strike,
                        letter(q.side), cell(q.bid), q.open_interest);
  }
  return text;
}

std::string planted_lines(const std::string& file, const std::vector<MadeQuote>& quotes,
                          std::size_t quotes_a_line) {
  std::string text;
  for (std::size_t i = 0; i < quotes.size(); ++i) {
    const MadeQuote& q = quotes[i];
    if (!q.fault) continue;
    text += fmt::format("{}\t{}\t{}\t{}\t{}\t{}\t{}\t{}\n", file, i / quotes_a_line + 2,
                        letter(q.side), q.underlying, iso_date(q.expiry.date), decimals(q.strike),
                        q.fault->kind, q.fault->expected);
  }
  return text;
}

bool store(const std::filesystem::path& folder, const NightFile& file) {
  const std::string bytes = packed(file);
  std::ofstream out(folder / file.name, std::ios::binary | std::ios::trunc);
  out.write(bytes.data(), static_cast<std::streamsize>(bytes.size()));
  out.close();
  return !out.fail();
}

}  // namespace duskgrid::make_night

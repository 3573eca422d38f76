#include "make_night_universe.h"

#include <fmt/format.h>
#include <tbb/parallel_for.h>

#include <algorithm>
#include <cmath>
#include <fstream>
#include <iterator>
#include <span>
#include <utility>
#include <vector>

#include "make_night_files.h"
#include "make_night_universe_names.h"
#include "pricing/american.h"
#include "pricing/american_panel.h"

namespace duskgrid::make_night {
namespace {

// Shared by all threads: tables made once, or constants.
struct Engines {
  pricing::PanelMaker panels;
  pricing::AmericanEngine reference;
};

// A strike with the truth about it.
struct Node {
  Cents strike;
  double k, total_vol;
};

// The premiums of one side of one expiry, as puts: a call is the put with spot and strike, rate and
// yield exchanged.
class Premiums {
 public:
  Premiums(const Engines& engines, Side side, const Name& name, const Terms& terms, double rate,
           std::span<const Node> nodes)
      : engines_(engines),
        terms_{side == Side::call ? quotes::PutCall::call : quotes::PutCall::put,
               static_cast<double>(name.spot) / 100,
               0,
               rate,
               name.carry,
               terms.t} {
    const double first = side == Side::put ? rate : name.carry;
    const double second = side == Side::put ? name.carry : rate;
    if (pricing::exercise_kind(terms_.put_call, rate, name.carry) == pricing::ExerciseKind::never)
      return;
    const auto [low, high] =
        std::minmax_element(nodes.begin(), nodes.end(),
                            [](const Node& a, const Node& b) { return a.total_vol < b.total_vol; });
    make_panels(first * terms.t, second * terms.t, low->total_vol, high->total_vol);
  }

  // The price whose European part is `european`.
  double price(const Node& node, double european) const {
    if (panels_.empty()) return european;
    const double strike = static_cast<double>(node.strike) / 100, spot = terms_.spot;
    const bool put = terms_.put_call == quotes::PutCall::put;
    const auto panel = std::find_if(panels_.begin(), panels_.end(),
                                    [&](const auto& p) { return node.total_vol <= p.high; });
    const auto premium = pricing::premium_at(
        panel == panels_.end() ? panels_.back() : *panel,
        put ? std::log(spot / strike) : std::log(strike / spot), node.total_vol);
    const double intrinsic = put ? strike - spot : spot - strike;
    if (premium.exercised) return intrinsic;
    constexpr double kGood = 1e-6;
    if (!(premium.error < kGood)) return by_reference(strike, node.total_vol);
    return std::max(intrinsic, european + premium.value * (put ? strike : spot));
  }

 private:
  void make_panels(double rate, double yield, double low, double high) {
    constexpr double kRatio = 3, kOverlap = 1.01;
    const double count = std::max(1.0, std::ceil(std::log(high / low) / std::log(kRatio)));
    const double ratio = std::pow(high / low, 1 / count);
    for (double i = 0; i < count; ++i, low *= ratio) {
      panels_.push_back(engines_.panels.make(rate, yield, low / kOverlap, low * ratio * kOverlap));
      // By the reference engine throughout, then.
      if (!panels_.back().converged) panels_.back().log_premium.fill(NAN);
    }
  }

  double by_reference(double strike, double total_vol) const {
    auto terms = terms_;
    terms.strike = strike;
    return engines_.reference.price(terms, total_vol / std::sqrt(terms.year_fraction)).price;
  }

  const Engines& engines_;
  pricing::AmericanTerms terms_;
  std::vector<pricing::PremiumPanel> panels_;
};

struct Texts {
  std::string quotes, truth;
};

void add_cents(std::string& to, Cents value) {
  fmt::format_to(std::back_inserter(to), "{}.{:02}", value / 100, value % 100);
}

std::string clock_text(std::int64_t unix, const AsOf& as_of) {
  const std::chrono::sys_seconds local{std::chrono::seconds{unix} + as_of.offset};
  const auto day = std::chrono::floor<std::chrono::days>(local);
  const std::chrono::hh_mm_ss time{local - day};
  return fmt::format("{}T{:02}:{:02}:{:02}", iso_date(Date{day}), time.hours().count(),
                     time.minutes().count(), time.seconds().count());
}

// One name: its rows and its truth.
class NameWriter {
 public:
  NameWriter(const World& world, const ListedName& listed, const Engines& engines)
      : world_(world),
        listed_(listed),
        engines_(engines),
        random_(world.seed, listed.name.code + " quotes"),
        tail_(fmt::format(",{},{},100", decimals(listed.name.spot),
                          listed.kind == Kind::index ? "European" : "American")) {}

  Texts run() {
    for (const ListedSlice& slice : listed_.slices) write_slice(slice);
    return std::move(texts_);
  }

 private:
  void write_slice(const ListedSlice& slice) {
    Name name = listed_.name;
    name.carry = carry_to(listed_, world_.as_of, world_.rates, slice.expiry);
    Terms terms = terms_of(world_.as_of, world_.rates, name, slice.expiry);
    const auto variance = [&](double k) {
      return total_variance(listed_, world_.as_of, slice.expiry, k);
    };
    terms.deviation = std::sqrt(variance(0));
    std::vector<Node> nodes;
    for (const Cents strike : listed_strikes(terms, slice.strikes)) {
      const double k = std::log(static_cast<double>(strike) / 100 / terms.forward);
      nodes.push_back({strike, k, std::sqrt(variance(k))});
    }
    const std::string date = iso_date(slice.expiry.date);
    const double rate = world_.rates.zero_rate(terms.t);
    if (listed_.kind == Kind::index) return write_nodes(date, terms, nodes, nullptr, nullptr);
    const Premiums calls(engines_, Side::call, name, terms, rate, nodes);
    const Premiums puts(engines_, Side::put, name, terms, rate, nodes);
    write_nodes(date, terms, nodes, &calls, &puts);
  }

  void write_nodes(const std::string& date, const Terms& terms, std::span<const Node> nodes,
                   const Premiums* calls, const Premiums* puts) {
    const std::string start = listed_.name.code + ',' + date + ',';
    for (const Node& node : nodes) {
      const double strike = static_cast<double>(node.strike) / 100;
      const double w = node.total_vol * node.total_vol;
      for (const Side side : {Side::call, Side::put}) {
        const double european = black(side, terms, strike, w);
        const Premiums* premiums = side == Side::call ? calls : puts;
        write_quote(start, node, side, premiums ? premiums->price(node, european) : european,
                    node.k / terms.deviation);
      }
      fmt::format_to(std::back_inserter(texts_.truth), "{},{},{},{},{},{}\n", listed_.name.code,
                     word(listed_.kind), date, decimals(node.strike),
                     node.total_vol / std::sqrt(terms.t), terms.forward);
    }
  }

  void write_quote(const std::string& start, const Node& node, Side side, double price,
                   double distance) {
    MadeQuote quote;
    quote_price(quote, price, distance, listed_.spread, random_);
    if (listed_.kind == Kind::dead) quote.bid = 0;
    std::string& row = texts_.quotes;
    row += start;
    add_cents(row, node.strike);
    row += side == Side::call ? ",C," : ",P,";
    add_cents(row, *quote.bid);
    row += ',';
    add_cents(row, *quote.ask);
    const double interest = 900 / (1 + distance * distance), luck = random_.uniform();
    const auto volume = static_cast<std::int64_t>(interest * luck * luck * luck);
    // One draw a statement: C++ leaves open which argument of a call is drawn first.
    const std::int64_t bid_size = *quote.bid > 0 ? random_.between(1, 60) : 0;
    const std::int64_t ask_size = random_.between(1, 80);
    const std::int64_t open = volume * random_.between(2, 9);
    const std::int64_t quoted = unix_seconds(world_.as_of) - random_.between(1, 1200);
    fmt::format_to(std::back_inserter(row), ",{},{},{},{},{}", bid_size, ask_size, volume, open,
                   clock_text(quoted, world_.as_of));
    row += tail_;
    row += '\n';
  }

  const World& world_;
  const ListedName& listed_;
  const Engines& engines_;
  Stream random_;
  std::string tail_;
  Texts texts_;
};

std::string dividends_toml(const ListedName& listed) {
  if (listed.dividends.empty()) return {};
  std::string list;
  for (const CashDividend& dividend : listed.dividends)
    list += fmt::format("{}\"{}\" = {}", list.empty() ? "" : ", ", iso_date(dividend.ex),
                        decimals(dividend.amount));
  return fmt::format("\n[underlying.{}]\ndividends = {{ {} }}\n", listed.name.code, list);
}

std::string universe_toml(const World& world, const std::vector<ListedName>& names) {
  std::string text = fmt::format(
      "# An invented universe, for measuring and for comparing with the truth.\n"
      "as_of = \"{}\"\n\n[[source]]\nfiles = [\"quotes.csv\"]\n\n"
      "# Continuous zero rates by tenor.\n[rates]\n",
      world.as_of.text);
  for (const int months : {1, 2, 3, 6, 9, 12, 18, 24, 36, 48}) {
    const double t = year_fraction(world.as_of, {months_ahead(world.as_of, months)});
    text += fmt::format("\"{}M\" = {:.7f}\n", months, world.rates.zero_rate(t));
  }
  for (const ListedName& listed : names) text += dividends_toml(listed);
  return text;
}

constexpr const char* kHeader =
    "underlying,expiry,strike,put_call,bid,ask,bid_size,ask_size,volume,open_interest,quote_time,"
    "underlying_price,exercise,multiplier\n";

// Names are made many at a time and written in their order.
std::string write_names(const std::filesystem::path& folder, const World& world,
                        const std::vector<ListedName>& names) {
  constexpr std::size_t kAtATime = 256;
  std::ofstream quotes(folder / "quotes.csv", std::ios::binary);
  std::ofstream truth(folder / "truth.csv", std::ios::binary);
  quotes << kHeader;
  truth << "underlying,kind,expiry,strike,vol,forward\n";
  const Engines engines;
  for (std::size_t first = 0; first < names.size(); first += kAtATime) {
    std::vector<Texts> texts(std::min(kAtATime, names.size() - first));
    tbb::parallel_for(std::size_t{0}, texts.size(), [&](std::size_t i) {
      texts[i] = NameWriter(world, names[first + i], engines).run();
    });
    for (const Texts& text : texts) {
      quotes << text.quotes;
      truth << text.truth;
    }
  }
  quotes.close();
  truth.close();
  return quotes && truth ? "" : (folder / "quotes.csv").string() + ": cannot be written";
}

}  // namespace

std::string write_universe(const std::filesystem::path& folder, const World& world,
                           const UniverseSize& size) {
  const auto names = list_universe(world, size.underlyings, size.quotes / 2);
  if (!store(folder, {"night.toml", universe_toml(world, names)}))
    return (folder / "night.toml").string() + ": cannot be written";
  return write_names(folder, world, names);
}

}  // namespace duskgrid::make_night

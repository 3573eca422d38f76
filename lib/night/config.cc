#include "night/config.h"

#include <fmt/format.h>

#include <algorithm>
#include <array>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <numeric>
#include <sstream>

#include "market/dates.h"
#include "market/day_count.h"
#include "night/config_fields.h"

namespace duskgrid::night {
namespace {

using market::DividendKind;
using quotes::Exercise;
using quotes::Layout;
using quotes::SourceOptions;

// Reference to a member, for const and mutable targets alike.
#define DUSKGRID_AT(member) \
  [](auto& target) -> auto& { return target.member; }

std::string_view word(Exercise exercise) {
  return exercise == Exercise::european ? "european" : "american";
}

std::optional<Exercise> to_exercise(const toml::node& node) {
  const auto text = to_text(node);
  if (text == "european") return Exercise::european;
  if (text == "american") return Exercise::american;
  return std::nullopt;
}

template <class Target>
Field<Target> exercise_field(std::string_view meaning) {
  return {"exercise", "european or american", meaning,
          [](Target& target, const toml::node& node) {
            target.exercise = to_exercise(node);
            return target.exercise.has_value();
          },
          [](const Target& target) {
            return target.exercise ? ordered_json(word(*target.exercise)) : ordered_json(nullptr);
          }};
}

std::optional<Layout> to_layout(const toml::node& node) {
  const auto text = to_text(node);
  for (const auto layout : {Layout::automatic, Layout::contract_per_row, Layout::call_put_per_row})
    if (text == word(layout)) return layout;
  return std::nullopt;
}

const std::vector<Field<NightConfig>>& night_fields() {
  static const std::vector<Field<NightConfig>> fields{
      field<NightConfig>("as_of", "date or instant",
                         "the instant the quotes stand for; a date alone is 16:00",
                         DUSKGRID_AT(as_of_text), to_text),
      field<NightConfig>("zone", "IANA time zone name",
                         "where local dates and times are read and written; without it the offset "
                         "of as_of, or UTC",
                         DUSKGRID_AT(zone), to_text),
      field<NightConfig>(
          "settlement_times", "table of word = \"HH:MM\"",
          "local time of day that a word of the settlement column stands for; without it am is "
          "09:30 and pm 16:00",
          DUSKGRID_AT(settlement_times), to_text_map),
      field<NightConfig>("holidays", "list of dates",
                         "days that, like Saturdays and Sundays, are not business days",
                         DUSKGRID_AT(holidays), to_texts),
      field<NightConfig>("spot", "> 0, quote currency",
                         "price of every underlying that neither its table nor its file gives",
                         DUSKGRID_AT(spot), to_number),
      exercise_field<NightConfig>(
          "exercise style of sources that state none, where no column says; european without it"),
      field<NightConfig>("rates", "table of tenor or date = number",
                         "continuous zero rates, decimals a year", DUSKGRID_AT(rates),
                         to_number_map),
      field<NightConfig>("discount_factors", "table of tenor or date = number > 0",
                         "discount factors, in place of or beside rates",
                         DUSKGRID_AT(discount_factors), to_number_map),
      field<NightConfig>("dividend_files", "list of paths",
                         "CSV with columns underlying, ex_date, amount and perhaps kind (cash, or "
                         "proportional: a share of the spot), beside the configuration",
                         DUSKGRID_AT(dividend_files), to_texts),
      {"report", "automatic, all, flagged or none",
       "which underlyings have a page in report/: all; those flagged, carried, refused or changed "
       "by more than is usual; automatic is all of fewer than 200, else flagged; none is no report",
       [](NightConfig& c, const toml::node& node) {
         const auto scope = publish::parse_report_scope(to_text(node).value_or(""));
         if (scope) c.report = *scope;
         return scope.has_value();
       },
       [](const NightConfig& c) { return ordered_json(publish::word(c.report)); }},
  };
  return fields;
}

const std::vector<Field<SourceOptions>>& source_fields() {
  using S = SourceOptions;
  static const std::vector<Field<S>> fields{
      field<S>("files", "list of paths or globs",
               "quote files of this habit, beside the configuration; absent when the command line "
               "names them",
               DUSKGRID_AT(files), to_texts),
      {"layout", "automatic, contract-per-row or call-put-per-row",
       "one contract a row, or call and put of a strike side by side",
       [](S& s, const toml::node& node) {
         const auto layout = to_layout(node);
         if (layout) s.layout = *layout;
         return layout.has_value();
       },
       [](const S& s) { return ordered_json(quotes::word(s.layout)); }},
      field<S>("delimiter", "one of , ; or tab", "what stands between cells; found when absent",
               DUSKGRID_AT(delimiter), to_letter),
      field<S>("decimal", ". or ,", "decimal mark", DUSKGRID_AT(decimal), to_letter),
      field<S>("thousands", "one of , . ' _ or space",
               "mark accepted between groups of three digits; without one the comma, or the point "
               "where decimal is the comma",
               DUSKGRID_AT(thousands), to_letter),
      field<S>("date_format", "letters d m Y y b H M S after %",
               "how dates are written when not ISO, YYYYMMDD or Unix seconds",
               DUSKGRID_AT(date_format), to_text),
      field<S>("null_words", "list of texts",
               "cells that mean nothing is there, beside empty, -, NA, N/A, null, nan, none",
               DUSKGRID_AT(null_words), to_texts),
      field<S>("strike_scale", "> 0", "multiplies strikes as read", DUSKGRID_AT(strike_scale),
               to_number),
      field<S>("price_scale", "> 0", "multiplies prices as read", DUSKGRID_AT(price_scale),
               to_number),
      field<S>("vol_scale", "> 0", "multiplies volatilities as read; 0.01 for percent",
               DUSKGRID_AT(vol_scale), to_number),
      field<S>("half_spread", ">= 0, quote currency",
               "half-spread to assume where a file has one price a contract",
               DUSKGRID_AT(half_spread_absolute), to_number),
      field<S>("half_spread_relative", ">= 0, fraction of the price", "added to half_spread",
               DUSKGRID_AT(half_spread_relative), to_number),
      exercise_field<S>("exercise style where no column says; without it that of the night"),
      field<S>("columns", "table of field = \"header\"",
               "which header carries a field, where the ordinary words do not show it",
               DUSKGRID_AT(columns), to_text_map),
      field<S>("fixed", "table of field = \"text\"", "what the file lacks, the same for every row",
               DUSKGRID_AT(fixed), to_text_map),
  };
  return fields;
}

const std::vector<Field<UnderlyingFacts>>& underlying_fields() {
  using U = UnderlyingFacts;
  static const std::vector<Field<U>> fields{
      field<U>("spot", "> 0, quote currency", "price of the underlying, over what files say",
               DUSKGRID_AT(spot), to_number),
      field<U>("carry", "decimals a year",
               "continuous yield q of F = S exp((r - q) t), where parity is silent",
               DUSKGRID_AT(carry), to_number),
      field<U>("borrow", "decimals a year",
               "continuous yield on top of the dividends; of american expiries it decides the "
               "forward, which is inferred without it, of others where parity is silent",
               DUSKGRID_AT(borrow), to_number),
      field<U>("dividends", "table of ex date = number >= 0",
               "cash dividends, quote currency a share, beside those of dividend_files",
               DUSKGRID_AT(dividends), to_number_map),
      field<U>("proportional_dividends", "table of ex date = number in [0, 1)",
               "dividends as shares of the spot", DUSKGRID_AT(proportional_dividends),
               to_number_map),
      field<U>("forwards", "table of date or instant = number > 0",
               "forwards given outright, by expiry", DUSKGRID_AT(forwards), to_number_map),
      exercise_field<U>("exercise style, over what files say"),
  };
  return fields;
}

const std::vector<Field<quotes::CleanOptions>>& clean_fields() {
  using C = quotes::CleanOptions;
  static const std::vector<Field<C>> fields{
      field<C>("shortest_hours", ">= 0, hours", "shortest time to expiry that is fitted",
               DUSKGRID_AT(shortest_hours), to_number),
      field<C>("widest", "> 0", "largest spread as a multiple of the mid", DUSKGRID_AT(widest),
               to_number),
      field<C>("stale_hours", ">= 0, hours",
               "oldest quote time before the as-of; 0 keeps every age", DUSKGRID_AT(stale_hours),
               to_number),
  };
  return fields;
}

const std::vector<Field<market::ParityOptions>>& parity_fields() {
  using P = market::ParityOptions;
  static const std::vector<Field<P>> fields{
      field<P>("rate_tolerance_given", "> 0, decimals a year",
               "deviation of an expiry's own zero rate from the given curve that counts as one "
               "standard error",
               DUSKGRID_AT(rate_tolerance_given), to_number),
      field<P>(
          "rate_tolerance_common", "> 0, decimals a year",
          "deviation of an expiry's own zero rate from the rate all expiries share, where no curve "
          "is given, that counts as one standard error",
          DUSKGRID_AT(rate_tolerance_common), to_number),
      field<P>("near_deviations", "> 0",
               "pairs near the money lie within this many at-the-money deviations",
               DUSKGRID_AT(near_deviations), to_number),
      field<P>("most_near_pairs", ">= 1", "most pairs near the money, nearest first",
               DUSKGRID_AT(most_near_pairs), to_count),
  };
  return fields;
}

const std::vector<Field<pricing::SelectionOptions>>& selection_fields() {
  using S = pricing::SelectionOptions;
  static const std::vector<Field<S>> fields{
      field<S>("far_deviations", "> 0",
               "furthest strike fitted, in at-the-money deviations from the forward",
               DUSKGRID_AT(far_deviations), to_number),
      field<S>("most_quotes", ">= 0", "most quotes of one expiry in the fit; 0 for all",
               DUSKGRID_AT(most_quotes), to_count),
      field<S>("outlier_half_spreads", ">= 0",
               "distance from the neighbours' line, in half-spreads of vol, that makes an outlier; "
               "0 keeps every quote",
               DUSKGRID_AT(outlier_half_spreads), to_number),
  };
  return fields;
}

const std::vector<Field<surface::BackboneOptions>>& backbone_fields() {
  using B = surface::BackboneOptions;
  static const std::vector<Field<B>> fields{
      field<B>("huber_half_spreads", "> 0",
               "misfit, in half-spreads, past which a quote pulls with constant force",
               DUSKGRID_AT(huber_half_spreads), to_number),
      field<B>("least_half_spread", "> 0, decimals of vol",
               "smallest half-spread a quote is credited with", DUSKGRID_AT(least_half_spread),
               to_number),
      field<B>("most_iterations", ">= 1", "most iterations of each start",
               DUSKGRID_AT(most_iterations), to_count),
  };
  return fields;
}

const std::vector<Field<surface::OverlayOptions>>& overlay_fields() {
  using O = surface::OverlayOptions;
  static const std::vector<Field<O>> fields{
      field<O>("most_coefficients", "0 or 6 to 64",
               "most coefficients of a slice's spline over the backbone; 0 for the backbone alone",
               DUSKGRID_AT(most_coefficients), to_count),
      field<O>("most_rounds", ">= 1", "most rounds of linearised no-arbitrage conditions",
               DUSKGRID_AT(most_rounds), to_count),
  };
  return fields;
}

const std::vector<Field<publish::GridOptions>>& grid_fields() {
  using G = publish::GridOptions;
  static const std::vector<Field<G>> fields{
      {"axis", "strike, moneyness, log_moneyness, deviations or delta",
       "what points are: K, K/F, ln(K/F), ln(K/F) over at-the-money total vol, or forward call "
       "delta",
       [](G& g, const toml::node& node) {
         const auto axis = publish::parse_axis(to_text(node).value_or(""));
         if (axis) g.axis = *axis;
         return axis.has_value();
       },
       [](const G& g) { return ordered_json(publish::word(g.axis)); }},
      field<G>("points", "list of numbers",
               "nodes on the axis; without them the listed strikes, or a usual spread of points",
               DUSKGRID_AT(points), to_numbers),
      {"tenors", "list such as \"1M\", \"2Y\"", "published beside the listed expiries",
       [](G& g, const toml::node& node) {
         const auto words = to_texts(node);
         if (!words) return false;
         for (const auto& text : *words) {
           const auto tenor = market::parse_tenor(text);
           if (!tenor) return false;
           g.tenors.push_back(*tenor);
           g.tenor_words.push_back(text);
         }
         return true;
       },
       [](const G& g) { return ordered_json(g.tenor_words); }},
  };
  return fields;
}

const std::vector<Field<FlagOptions>>& flag_fields() {
  static const std::vector<Field<FlagOptions>> fields{
      field<FlagOptions>("most_missed", "0 to 1",
                         "share of used quotes missed by more than a half-spread beyond the spread "
                         "that flags an underlying",
                         DUSKGRID_AT(most_missed), to_number),
  };
  return fields;
}

const std::vector<Field<publish::CompareOptions>>& compare_fields() {
  using C = publish::CompareOptions;
  static const std::vector<Field<C>> fields{
      field<C>(
          "tolerance", "> 0, decimals of vol",
          "change of a node since the night before, at equal log-moneyness and less roll-down, "
          "that is to be signed off",
          DUSKGRID_AT(tolerance), to_number),
      field<C>("times_typical", ">= 0",
               "the same as a multiple of the median nightly change of the underlying's "
               "at-the-money vol at that time to expiry; 0 for none",
               DUSKGRID_AT(times_typical), to_number),
      field<C>("deviations", "> 0",
               "furthest node to be signed off, in at-the-money deviations from the forward",
               DUSKGRID_AT(deviations), to_number),
      field<C>("least_nights", ">= 2", "nights in the history that the median needs",
               DUSKGRID_AT(least_nights), to_count),
      field<C>("most_nights", "least_nights to 1000", "nights of the history that it looks at",
               DUSKGRID_AT(most_nights), to_count),
  };
  return fields;
}

const std::vector<Field<CarryOptions>>& carry_fields() {
  static const std::vector<Field<CarryOptions>> fields{
      field<CarryOptions>("most_business_days", "0 to 250",
                          "oldest surface that stands in for an underlying that cannot be marked; "
                          "0 carries none",
                          DUSKGRID_AT(most_business_days), to_count),
  };
  return fields;
}

const std::vector<Field<HistoryOptions>>& history_fields() {
  static const std::vector<Field<HistoryOptions>> fields{
      field<HistoryOptions>("surfaces", "true or false",
                            "whether history.sqlite keeps whole surfaces beside their figures",
                            DUSKGRID_AT(surfaces), to_flag),
  };
  return fields;
}

#undef DUSKGRID_AT

// Tables of one name and one place: calls visit(name, fields, member of config) for each.
template <class Config, class Visit>
void each_table(Config& config, Visit visit) {
  visit("clean", clean_fields(), config.clean);
  visit("parity", parity_fields(), config.parity);
  visit("selection", selection_fields(), config.selection);
  visit("backbone", backbone_fields(), config.backbone);
  visit("overlay", overlay_fields(), config.overlay);
  visit("grid", grid_fields(), config.grid);
  visit("flags", flag_fields(), config.flags);
  visit("compare", compare_fields(), config.compare);
  visit("carry", carry_fields(), config.carry);
  visit("history", history_fields(), config.history);
}

// Where the reading stands, for messages.
struct Place {
  std::string where;  // file
  std::string table;  // "" at the top
  Failure failure(const toml::node& node, const std::string& what) const {
    const auto line = node.source().begin.line;
    return {Fault::configuration, line > 0 ? fmt::format("{} line {}", where, line) : where, what};
  }
  std::string full(std::string_view key) const {
    return table.empty() ? std::string(key) : table + "." + std::string(key);
  }
};

std::optional<Failure> unknown_key(const Place& place, const toml::node& node, std::string_view key,
                                   const std::vector<std::string>& known) {
  const std::string near = nearest(key, known);
  std::string list;
  for (const auto& word : known) list += (list.empty() ? "" : ", ") + word;
  return place.failure(
      node, fmt::format("unknown key '{}'; {}", place.full(key),
                        near.empty() ? "known here: " + list
                                     : "the nearest known key is '" + place.full(near) + "'"));
}

// Reads every key of `table` that `fields` knows; `others` takes the rest and returns true for
// those it knows.
template <class Target, class Others>
std::optional<Failure> read_table(const toml::table& table,
                                  const std::vector<Field<Target>>& fields, Target& target,
                                  const Place& place, Others others,
                                  std::vector<std::string> known = {}) {
  for (const auto& f : fields) known.emplace_back(f.key);
  for (const auto& [key, node] : table) {
    const auto found = std::find_if(fields.begin(), fields.end(), [&, &name = key](const auto& f) {
      return f.key == name.str();
    });
    if (found == fields.end()) {
      if (others(key.str())) continue;
      return unknown_key(place, node, key.str(), known);
    }
    if (!found->read(target, node))
      return place.failure(node, fmt::format("{} must be {}", place.full(key.str()), found->range));
  }
  return std::nullopt;
}

template <class Target>
std::optional<Failure> read_plain(const toml::node& node, const std::vector<Field<Target>>& fields,
                                  Target& target, const Place& place) {
  if (!node.is_table())
    return place.failure(node, fmt::format("{} must be a table: [{}]", place.table, place.table));
  return read_table(*node.as_table(), fields, target, place, [](auto) { return false; });
}

// A path of the configuration, which is relative to its folder.
std::string beside(const std::string& folder, const std::string& file) {
  if (folder.empty() || std::filesystem::path(file).is_absolute()) return file;
  return (std::filesystem::path(folder) / file).string();
}

std::optional<Failure> read_sources(const toml::node& node, NightConfig& config,
                                    const std::string& where, const std::string& folder) {
  Place place{where, "source"};
  if (!node.is_array_of_tables()) return place.failure(node, "source must be tables: [[source]]");
  for (const auto& item : *node.as_array()) {
    SourceOptions source;
    if (auto failure = read_plain(item, source_fields(), source, place)) return failure;
    if (const auto problem = source.problem()) return place.failure(item, "source: " + *problem);
    for (auto& file : source.files) file = beside(folder, file);
    config.sources.push_back(std::move(source));
  }
  return std::nullopt;
}

std::optional<std::string> dividends_problem(const std::map<std::string, double>& dividends,
                                             DividendKind kind) {
  for (const auto& [date, amount] : dividends) {
    if (!quotes::parse_date_cell(date))
      return fmt::format("dividends has '{}', must be a date such as 2031-05-02", date);
    if (const auto problem = market::amount_problem(kind, amount))
      return fmt::format("dividend of {}: {}", date, *problem);
  }
  return std::nullopt;
}

std::optional<std::string> facts_problem(const UnderlyingFacts& facts) {
  if (facts.spot && !(*facts.spot > 0)) return fmt::format("spot = {}, must be > 0", *facts.spot);
  if (facts.carry && !(std::abs(*facts.carry) <= 1))
    return fmt::format("carry = {}, must be between -1 and 1 a year", *facts.carry);
  if (facts.borrow && !(std::abs(*facts.borrow) <= 1))
    return fmt::format("borrow = {}, must be between -1 and 1 a year", *facts.borrow);
  if (facts.carry && facts.borrow)
    return "carry and borrow are two ways to say one thing: carry is the whole yield, borrow what "
           "comes on top of the dividends";
  if (facts.carry && !(facts.dividends.empty() && facts.proportional_dividends.empty()))
    return "carry is the whole yield, dividends included: state borrow beside dividends";
  if (auto problem = dividends_problem(facts.dividends, DividendKind::cash)) return problem;
  if (auto problem = dividends_problem(facts.proportional_dividends, DividendKind::proportional))
    return problem;
  for (const auto& [expiry, forward] : facts.forwards) {
    if (!quotes::parse_date_cell(expiry))
      return fmt::format("forwards has '{}', must be a date or instant", expiry);
    if (!(forward > 0)) return fmt::format("forward of {} = {}, must be > 0", expiry, forward);
  }
  return std::nullopt;
}

std::optional<Failure> read_underlyings(const toml::node& node, NightConfig& config,
                                        const std::string& where) {
  Place place{where, "underlying"};
  if (!node.is_table())
    return place.failure(node, "underlying must be tables by name: [underlying.NAME]");
  for (const auto& [name, item] : *node.as_table()) {
    Place inner{where, "underlying." + std::string(name.str())};
    auto& facts = config.underlyings[std::string(name.str())];
    if (auto failure = read_plain(item, underlying_fields(), facts, inner)) return failure;
    if (const auto problem = facts_problem(facts))
      return inner.failure(item, inner.table + ": " + *problem);
  }
  return std::nullopt;
}

std::optional<Failure> read_night(const toml::table& table, NightConfig& config,
                                  const std::string& where, const std::string& folder) {
  std::vector<std::string> tables{"source", "underlying"};
  each_table(config, [&](const char* name, auto&, auto&) { tables.emplace_back(name); });
  const auto is_table = [&](std::string_view key) {
    return std::find(tables.begin(), tables.end(), key) != tables.end();
  };
  if (auto failure = read_table(table, night_fields(), config, Place{where, ""}, is_table, tables))
    return failure;
  for (auto& file : config.dividend_files) file = beside(folder, file);
  if (const auto* node = table.get("source"))
    if (auto failure = read_sources(*node, config, where, folder)) return failure;
  if (const auto* node = table.get("underlying"))
    if (auto failure = read_underlyings(*node, config, where)) return failure;
  std::optional<Failure> first;
  each_table(config, [&](const char* name, const auto& fields, auto& target) {
    const auto* node = table.get(name);
    if (node && !first) first = read_plain(*node, fields, target, Place{where, name});
  });
  return first;
}

// Rules over several values, checked once all are read.
std::optional<std::string> problem_of(const NightConfig& c) {
  const auto in = [](const char* table, const std::optional<std::string>& problem) {
    return problem ? std::optional(fmt::format("{}.{}", table, *problem)) : std::nullopt;
  };
  if (auto p = in("clean", c.clean.problem())) return p;
  if (auto p = in("parity", c.parity.problem())) return p;
  if (auto p = in("selection", c.selection.problem())) return p;
  if (auto p = in("backbone", c.backbone.problem())) return p;
  if (auto p = in("overlay", c.overlay.problem())) return p;
  if (auto p = in("grid", c.grid.problem())) return p;
  if (c.spot && !(*c.spot > 0)) return fmt::format("spot = {}, must be > 0", *c.spot);
  if (!(c.flags.most_missed >= 0 && c.flags.most_missed <= 1))
    return fmt::format("flags.most_missed = {}, must be 0 to 1", c.flags.most_missed);
  if (auto p = in("compare", c.compare.problem())) return p;
  if (c.carry.most_business_days < 0 || c.carry.most_business_days > 250)
    return fmt::format("carry.most_business_days = {}, must be 0 to 250",
                       c.carry.most_business_days);
  return std::nullopt;
}

template <class Target>
ordered_json table_to_json(const std::vector<Field<Target>>& fields, const Target& target) {
  ordered_json out = ordered_json::object();
  for (const auto& f : fields) out[std::string(f.key)] = f.write(target);
  return out;
}

// Years from the as-of to a key of the rates: a tenor, or a date.
std::optional<double> time_of_key(const std::string& key, const quotes::AsOf& as_of) {
  if (const auto tenor = market::parse_tenor(key))
    return market::year_fraction(as_of.instant,
                                 market::add_tenor(as_of.instant, *tenor, as_of.clock));
  const auto cell = quotes::parse_date_cell(key);
  if (!cell) return std::nullopt;
  return market::year_fraction(as_of.instant,
                               quotes::resolve(*cell, as_of.clock, std::chrono::hours{16}));
}

// Of the files, then of the configuration.
std::optional<Failure> gather_dividends(const NightConfig& config, ResolvedNight& night) {
  for (const auto& path : config.dividend_files) {
    auto file = market::read_dividends(path, night.as_of.clock);
    if (!file) return file.failure();
    night.dividend_rows.emplace_back(path, file->rows);
    for (auto& [name, dated] : file->table) {
      auto& all = night.dividends[name];
      all.insert(all.end(), dated.begin(), dated.end());
    }
  }
  for (const auto& [name, facts] : config.underlyings)
    for (const auto kind : {DividendKind::cash, DividendKind::proportional}) {
      const auto& stated =
          kind == DividendKind::cash ? facts.dividends : facts.proportional_dividends;
      for (const auto& [date, amount] : stated)
        if (const auto cell = quotes::parse_date_cell(date))
          night.dividends[name].push_back(
              {market::ex_instant(*cell, night.as_of.clock), kind, amount});
    }
  return std::nullopt;
}

Result<std::vector<std::chrono::sys_days>> holidays_of(const NightConfig& config) {
  std::vector<std::chrono::sys_days> days;
  for (const auto& text : config.holidays) {
    const auto cell = quotes::parse_date_cell(text);
    if (!cell || !cell->date || cell->time_of_day)
      return Failure{Fault::configuration, "",
                     fmt::format("holidays has '{}', must be a date like 2031-12-25", text)};
    days.emplace_back(*cell->date);
  }
  return days;
}

Result<std::optional<market::ZeroCurve>> curve_of(const NightConfig& config,
                                                  const quotes::AsOf& as_of) {
  std::vector<market::ZeroPoint> points;
  const auto refuse = [](const std::string& what) {
    return Failure{Fault::configuration, "", what};
  };
  for (const bool factors : {false, true}) {
    for (const auto& [key, value] : factors ? config.discount_factors : config.rates) {
      const char* table = factors ? "discount_factors" : "rates";
      const auto t = time_of_key(key, as_of);
      if (!t || !(*t > 0))
        return refuse(fmt::format("{} has '{}', must be a tenor such as 3M or a date after as_of",
                                  table, key));
      if (factors && !(value > 0))
        return refuse(fmt::format("{}.{} = {}, must be > 0", table, key, value));
      points.push_back({*t, factors ? -std::log(value) / *t : value});
    }
  }
  if (points.empty()) return std::optional<market::ZeroCurve>();
  auto curve = market::ZeroCurve::make(std::move(points));
  if (!curve) return refuse("rates: " + curve.failure().text());
  return std::optional(std::move(*curve));
}

}  // namespace

std::string nearest(std::string_view word, const std::vector<std::string>& known) {
  // Two edits, or a third of a long word, is still a slip of the pen.
  std::size_t best = std::max<std::size_t>(2, word.size() / 3) + 1;
  std::string found;
  for (const auto& candidate : known) {
    std::vector<std::size_t> row(candidate.size() + 1);
    std::iota(row.begin(), row.end(), std::size_t{0});
    for (std::size_t i = 0; i < word.size(); ++i) {
      std::size_t diagonal = std::exchange(row[0], i + 1);
      for (std::size_t j = 0; j < candidate.size(); ++j) {
        const std::size_t change = diagonal + (word[i] == candidate[j] ? 0 : 1);
        diagonal = row[j + 1];
        row[j + 1] = std::min({row[j + 1] + 1, row[j] + 1, change});
      }
    }
    if (row.back() < best) {
      best = row.back();
      found = candidate;
    }
  }
  return found;
}

std::vector<OptionEntry> options() {
  std::vector<OptionEntry> out;
  const auto add = [&](std::string_view table, const auto& fields, const auto& target) {
    for (const auto& f : fields)
      out.push_back({table, f.key, f.range, f.write(target).dump(), f.meaning});
  };
  const NightConfig defaults;
  add("", night_fields(), defaults);
  add("source", source_fields(), SourceOptions{});
  add("underlying.NAME", underlying_fields(), UnderlyingFacts{});
  each_table(defaults, [&](const char* name, const auto& fields, const auto& target) {
    add(name, fields, target);
  });
  return out;
}

Result<NightConfig> parse_config(std::string_view toml_text, const std::string& where,
                                 const std::string& folder) {
  NightConfig config;
  try {
    const toml::table table = toml::parse(toml_text);
    if (auto failure = read_night(table, config, where, folder)) return *failure;
  } catch (const toml::parse_error& error) {
    return Failure{Fault::configuration,
                   fmt::format("{} line {}", where, error.source().begin.line),
                   std::string(error.description())};
  }
  if (const auto problem = problem_of(config))
    return Failure{Fault::configuration, where, *problem};
  return config;
}

Result<NightConfig> read_config(const std::string& path) {
  std::error_code error;
  std::ifstream file(path, std::ios::binary);
  if (!file || std::filesystem::is_directory(path, error))
    return Failure{Fault::no_input, path, "is missing or not a file"};
  std::string text{std::istreambuf_iterator<char>(file), {}};
  return parse_config(text, path, std::filesystem::path(path).parent_path().string());
}

Result<ResolvedNight> resolve(const NightConfig& config) {
  quotes::Clock zone{config.zone, {}};
  if (const auto problem = zone.problem()) return Failure{Fault::configuration, "", *problem};
  if (config.as_of_text.empty())
    return Failure{
        Fault::usage, "",
        "no as-of: say --as-of 2031-03-14T16:00:00-05:00, or as_of in the configuration"};
  auto as_of = quotes::parse_as_of(config.as_of_text, config.zone);
  if (!as_of) return as_of.failure();
  ResolvedNight night;
  night.as_of = *as_of;
  night.times.clock = as_of->clock;
  night.times.default_time = std::chrono::hours{16};
  // Common practice of morning and afternoon settlement, where nothing is stated.
  if (config.settlement_times.empty())
    night.times.settlement_times = {{"am", std::chrono::minutes{9 * 60 + 30}},
                                    {"pm", std::chrono::hours{16}}};
  for (const auto& [name, text] : config.settlement_times) {
    const auto time = quotes::parse_time_of_day(text);
    if (!time)
      return Failure{Fault::configuration, "",
                     fmt::format("settlement_times.{} = {}, must be like 09:30", name, text)};
    std::string folded = name;
    std::transform(folded.begin(), folded.end(), folded.begin(),
                   [](unsigned char c) { return static_cast<char>(std::tolower(c)); });
    night.times.settlement_times[folded] = *time;
  }
  auto curve = curve_of(config, *as_of);
  if (!curve) return curve.failure();
  night.curve = std::move(*curve);
  if (auto failure = gather_dividends(config, night)) return *failure;
  auto holidays = holidays_of(config);
  if (!holidays) return holidays.failure();
  night.holidays = std::move(*holidays);
  return night;
}

std::vector<quotes::SourceOptions> sources_of(const NightConfig& config) {
  auto sources = config.sources;
  for (auto& source : sources)
    if (!source.exercise) source.exercise = config.exercise;
  return sources;
}

std::string config_to_json(const NightConfig& config) {
  ordered_json out = table_to_json(night_fields(), config);
  out["source"] = ordered_json::array();
  for (const auto& source : config.sources)
    out["source"].push_back(table_to_json(source_fields(), source));
  out["underlying"] = ordered_json::object();
  for (const auto& [name, facts] : config.underlyings)
    out["underlying"][name] = table_to_json(underlying_fields(), facts);
  each_table(config, [&](const char* name, const auto& fields, const auto& target) {
    out[name] = table_to_json(fields, target);
  });
  return out.dump(-1, ' ', false, ordered_json::error_handler_t::replace);
}

}  // namespace duskgrid::night

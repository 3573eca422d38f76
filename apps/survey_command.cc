#include <fmt/format.h>

#include <algorithm>
#include <map>
#include <set>

#include "chain_picture.h"
#include "commands.h"
#include "console.h"
#include "input_arguments.h"
#include "quotes/chain.h"

namespace duskgrid::commands {
namespace {

using console::grouped;

std::string delimiter_word(char delimiter) {
  switch (delimiter) {
    case ',': return "comma";
    case ';': return "semicolon";
    case '\t': return "tab";
    default: return std::string(1, delimiter);
  }
}

std::string column_text(const quotes::Column& column) {
  const auto field = quotes::fields()[static_cast<std::size_t>(column.field)].word;
  const char* side = column.side == quotes::Side::call  ? "call_"
                     : column.side == quotes::Side::put ? "put_"
                                                        : "";
  const std::string name = side + std::string(field);
  return column.header == name ? name : fmt::format("{} = \"{}\"", name, column.header);
}

void print_list(const char* label, const std::vector<std::string>& items) {
  if (items.empty()) return;
  std::string text;
  for (const auto& item : items) text += (text.empty() ? "" : ", ") + item;
  fmt::print("  {}:\n{}", label, console::wrapped(text, 78, 4));
}

void print_file(const quotes::FileSummary& file) {
  fmt::print("{}\n  {} bytes{}, {} between cells, {}\n", file.file, grouped(file.bytes),
             file.compression == "none" ? "" : " of " + file.compression,
             delimiter_word(file.delimiter), quotes::word(file.columns.layout));
  std::vector<std::string> read;
  for (const auto& column : file.columns.columns) read.push_back(column_text(column));
  print_list("columns read", read);
  print_list("columns not read", file.columns.ignored);
  fmt::print("  {} rows, {} contracts, {} unreadable\n\n", grouped(file.rows),
             grouped(file.contracts), grouped(file.unreadable));
}

// What one underlying's readable quotes are.
struct ChainFacts {
  std::int64_t expiries = 0, quotes = 0, two_sided = 0, american = 0;
  quotes::Instant first = quotes::kNoInstant, last = quotes::kNoInstant;
  std::set<double> strikes;
};

ChainFacts facts_of(const quotes::QuoteTable& table, const quotes::Chain& chain) {
  ChainFacts facts;
  facts.expiries = static_cast<std::int64_t>(chain.slices.size());
  if (chain.slices.empty()) return facts;
  facts.first = chain.slices.front().expiry;
  facts.last = chain.slices.back().expiry;
  for (const auto& slice : chain.slices)
    for (const auto row : slice.rows) {
      const auto& q = table.quotes[row];
      ++facts.quotes;
      if (q.bid > 0 && q.ask >= q.bid) ++facts.two_sided;
      if (q.exercise == quotes::Exercise::american) ++facts.american;
      facts.strikes.insert(q.strike);
    }
  return facts;
}

void print_chains(const quotes::QuoteTable& table, const quotes::Clock& clock) {
  console::Table out(
      {"underlying", ">expiries", "first", "last", ">strikes", ">quotes", ">two-sided"});
  std::int64_t american = 0;
  for (const auto& chain : quotes::group_chains(table)) {
    const auto facts = facts_of(table, chain);
    if (facts.quotes == 0) continue;
    american += facts.american;
    out.add({console::shortened(table.underlyings[chain.underlying], 20), grouped(facts.expiries),
             quotes::format_date(clock, facts.first), quotes::format_date(clock, facts.last),
             grouped(static_cast<std::int64_t>(facts.strikes.size())), grouped(facts.quotes),
             grouped(facts.two_sided)});
  }
  if (!out.empty()) fmt::print("{}", out.text());
  if (american > 0) fmt::print("{} quotes are american\n", grouped(american));
}

// Of the underlying with the most contracts.
void print_picture(const quotes::QuoteTable& table, const quotes::Clock& clock) {
  const auto chains = quotes::group_chains(table);
  const auto most = std::max_element(chains.begin(), chains.end(),
                                     [](const auto& a, const auto& b) { return a.read < b.read; });
  if (most == chains.end() || most->slices.empty()) return;
  fmt::print("\n{}\n", chain_picture(table, *most, clock, console::writes_utf8()));
}

// What the as-of has to be close to.
void print_times(const quotes::QuoteTable& table, const quotes::Clock& clock) {
  auto first = quotes::kNoInstant, last = quotes::kNoInstant;
  for (const auto& q : table.quotes) {
    if (q.quote_time == quotes::kNoInstant) continue;
    if (first == quotes::kNoInstant || q.quote_time < first) first = q.quote_time;
    if (last == quotes::kNoInstant || q.quote_time > last) last = q.quote_time;
  }
  if (first == quotes::kNoInstant) return;
  fmt::print("quote times: {} to {}\n", quotes::format_instant(clock, first),
             quotes::format_instant(clock, last));
}

void print_exercise(const std::vector<quotes::FileSummary>& files) {
  for (const auto& file : files)
    if (file.columns.find(quotes::Field::exercise) < 0 && file.rows > 0)
      fmt::print("exercise style of {}: no column says; {}\n", file.file,
                 !file.exercise ? "nothing is stated, so it is taken as european"
                 : *file.exercise == quotes::Exercise::european ? "european, as stated"
                                                                : "american, as stated");
}

// Remarks on rows that were read all the same.
void print_remarks(const quotes::QuoteTable& table) {
  std::map<std::int32_t, std::int64_t> counts;
  for (const auto& q : table.quotes)
    if (q.reason != quotes::Reason::unreadable && q.note >= 0) ++counts[q.note];
  for (const auto& [note, count] : counts)
    fmt::print("{} contracts read, but: {}\n", grouped(count), table.notes[note]);
}

// Why rows could not be read, with the first line of each kind.
void print_unreadable(const quotes::QuoteTable& table) {
  std::map<std::int32_t, std::pair<std::int64_t, const quotes::Quote*>> kinds;
  for (const auto& q : table.quotes)
    if (q.reason == quotes::Reason::unreadable) {
      auto& kind = kinds.try_emplace(q.note, 0, &q).first->second;
      ++kind.first;
    }
  bool numbers = false;
  for (const auto& [note, kind] : kinds) {
    numbers = numbers || (note >= 0 && table.notes[note].ends_with("not a number"));
    fmt::print("unreadable: {} of \"{}\", the first in {} line {}\n", grouped(kind.first),
               note < 0 ? "" : table.notes[note], table.files[kind.second->file],
               kind.second->line);
  }
  if (numbers) fmt::print("numbers written like 1.234,50 need decimal = \",\" in [[source]]\n");
}

int survey(const InputArguments& args) {
  auto config = args.config();
  if (!config) return console::report(config.failure());
  // Dates need some as-of to be read by; which one does not matter here.
  if (config->as_of_text.empty()) config->as_of_text = "2000-01-01";
  const auto night = night::resolve(*config);
  if (!night) return console::report(night.failure());
  const auto loaded = quotes::load_quotes(night::sources_of(*config), night->times);
  if (!loaded) return console::report(loaded.failure());
  for (const auto& file : loaded->files) print_file(file);
  print_chains(loaded->table, night->as_of.clock);
  print_picture(loaded->table, night->as_of.clock);
  print_times(loaded->table, night->as_of.clock);
  print_exercise(loaded->files);
  print_remarks(loaded->table);
  print_unreadable(loaded->table);
  return loaded->table.quotes.empty() ? console::kNotAllPublished : console::kDone;
}

}  // namespace

void add_survey(CLI::App& program, int& status) {
  auto* command =
      program.add_subcommand("survey", "Say what quote files hold and how they are read");
  auto args = std::make_shared<InputArguments>();
  args->add_to(*command);
  command->footer(
      "Examples:\n"
      "  duskgrid survey quotes.csv\n"
      "  duskgrid survey NIGHT.toml\n\n"
      "Exit status: 0 done; 4 no rows; 64 usage; 65 not such a CSV; 66 no\n"
      "input; 70 internal; 78 configuration.");
  command->callback([args, &status] { status = survey(*args); });
}

}  // namespace duskgrid::commands

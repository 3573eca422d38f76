#include <fmt/format.h>

#include <charconv>
#include <cmath>

#include "commands.h"
#include "console.h"
#include "publish/points_file.h"
#include "publish/surface_json.h"
#include "publish/tables.h"
#include "publish/values.h"
#include "quotes/bytes.h"
#include "quotes/cells.h"

namespace duskgrid::commands {
namespace {

using publish::Axis, publish::StoredSurface, publish::ValuePoint, publish::ValueTime;
using Points = std::vector<ValuePoint>;
using Times = std::vector<ValueTime>;

struct ValueArguments {
  std::string surface;
  std::vector<std::string> strikes, moneyness, log_moneyness, expiries, tenors;
  std::string points;
  std::string put_call;
  std::string zone;
  bool swaps = false;

  bool names_points() const {
    return !strikes.empty() || !moneyness.empty() || !log_moneyness.empty();
  }
  bool names_times() const { return !expiries.empty() || !tenors.empty(); }
};

Failure usage(const std::string& what) { return {Fault::usage, "", what}; }

Result<std::string> text_of(const std::string& path) {
  auto source = quotes::TextSource::open(path);
  if (!source) return source.failure();
  std::string text;
  std::vector<char> buffer(std::size_t{1} << 16);
  while (const std::size_t got = (*source)->read(buffer.data(), buffer.size()))
    text.append(buffer.data(), got);
  if (const auto& failure = (*source)->failure()) return *failure;
  return text;
}

Result<StoredSurface> read_surface(const ValueArguments& args) {
  const auto text = text_of(args.surface);
  if (!text) return text.failure();
  auto stored = publish::surface_from_json(*text, args.surface);
  if (!stored || args.zone.empty()) return stored;
  stored->as_of.clock = {args.zone, {}};
  if (const auto problem = stored->as_of.clock.problem()) return usage("--" + *problem);
  return stored;
}

Result<bool> add_points(const char* option, Axis axis, const std::vector<std::string>& texts,
                        std::optional<quotes::PutCall> side, Points& points) {
  for (const auto& text : texts) {
    ValuePoint point{axis, quotes::kAbsent, side};
    const char* end = text.data() + text.size();
    const auto [stop, error] = std::from_chars(text.data(), end, point.point);
    if (error != std::errc{} || stop != end) point.point = quotes::kAbsent;
    if (const auto problem = publish::problem_of(point))
      return usage(fmt::format("{} has '{}', {}", option, text, *problem));
    points.push_back(point);
  }
  return true;
}

Result<Points> points_of(const ValueArguments& args) {
  std::optional<quotes::PutCall> side;
  if (!args.put_call.empty()) side = quotes::parse_put_call(args.put_call);
  if (!args.put_call.empty() && !side)
    return usage(fmt::format("--put-call is '{}', must be C or P", args.put_call));
  Points points;
  for (const auto& taken :
       {add_points("--strike", Axis::strike, args.strikes, side, points),
        add_points("--moneyness", Axis::moneyness, args.moneyness, side, points),
        add_points("--log-moneyness", Axis::log_moneyness, args.log_moneyness, side, points)})
    if (!taken) return taken.failure();
  if (points.empty())
    for (const double moneyness : {0.8, 0.9, 1.0, 1.1, 1.2})
      points.push_back({Axis::moneyness, moneyness, side});
  return points;
}

Result<Times> times_of(const ValueArguments& args, const StoredSurface& stored) {
  if (!args.names_times()) return publish::listed_times(stored);
  Times times;
  for (const auto& text : args.expiries) {
    const auto found = publish::times_of_expiry(stored, text);
    if (!found) return usage("--expiry: " + found.failure().detail);
    times.insert(times.end(), found->begin(), found->end());
  }
  for (const auto& text : args.tenors) {
    const auto found = publish::time_of_tenor(stored, text);
    if (!found) return usage("--tenor: " + found.failure().detail);
    times.push_back(*found);
  }
  return times;
}

// A row's expiry decides, and its tenor is then a name; a tenor alone is counted from the as-of.
Result<Times> times_of(const publish::WantedPoint& wanted, const StoredSurface& stored) {
  if (wanted.expiry.empty()) {
    const auto found = publish::time_of_tenor(stored, wanted.tenor);
    if (!found) return found.failure();
    return Times{*found};
  }
  auto found = publish::times_of_expiry(stored, wanted.expiry);
  if (found && market::parse_tenor(wanted.tenor))
    for (auto& time : *found) time.tenor = wanted.tenor;
  return found;
}

struct Printer {
  const StoredSurface& stored;
  publish::InstantTexts instants{stored.as_of.clock};

  void values(const ValueTime& time, const Points& points) {
    const surface::TimedSmile smile(stored.surface, time.year_fraction);
    for (const auto& point : points)
      fmt::print(
          "{}", publish::values_line(
                    time, publish::value_at(stored.surface, smile, time.carried, point), instants));
  }
  void swap(const ValueTime& time) {
    const surface::TimedSmile smile(stored.surface, time.year_fraction);
    const double vol = std::sqrt(smile.at(0).w / time.year_fraction);
    fmt::print("{}", publish::swaps_line(time, vol, surface::variance_swap(smile), instants));
  }
};

// All points are resolved before the first line, so that bad input prints nothing.
Result<bool> print_file(const ValueArguments& args, const StoredSurface& stored) {
  const auto wanted = publish::read_points(args.points);
  if (!wanted) return wanted.failure();
  std::vector<std::pair<Times, ValuePoint>> rows;
  for (const auto& w : *wanted) {
    if (!w.underlying.empty() && w.underlying != stored.surface.underlying) continue;
    auto times = times_of(w, stored);
    if (!times)
      return Failure{Fault::not_quotes, args.points,
                     fmt::format("line {}: {}", w.line, times.failure().detail)};
    rows.emplace_back(std::move(*times), w.point);
  }
  if (rows.empty())
    return Failure{Fault::not_quotes, args.points,
                   "holds no point of " + stored.surface.underlying};
  fmt::print("{}", publish::kValuesHeader);
  Printer printer{stored};
  for (const auto& [times, point] : rows)
    for (const auto& time : times) printer.values(time, {point});
  return true;
}

Result<bool> print_values(const ValueArguments& args, const StoredSurface& stored) {
  const auto points = points_of(args);
  if (!points) return points.failure();
  const auto times = times_of(args, stored);
  if (!times) return times.failure();
  fmt::print("{}", args.swaps ? publish::kSwapsHeader : publish::kValuesHeader);
  Printer printer{stored};
  for (const auto& time : *times) {
    if (args.swaps)
      printer.swap(time);
    else
      printer.values(time, *points);
  }
  return true;
}

Result<bool> checked(const ValueArguments& args) {
  if (args.swaps && (args.names_points() || !args.put_call.empty() || !args.points.empty()))
    return usage("--variance-swaps has one line an expiry: leave out points and --put-call");
  if (!args.points.empty() && (args.names_points() || args.names_times() || !args.put_call.empty()))
    return usage("--points says every expiry, strike and side: leave out the other options");
  return true;
}

int value(const ValueArguments& args) {
  if (const auto sound = checked(args); !sound) return console::report(sound.failure());
  const auto stored = read_surface(args);
  if (!stored) return console::report(stored.failure());
  const auto printed =
      args.points.empty() ? print_values(args, *stored) : print_file(args, *stored);
  return printed ? console::kDone : console::report(printed.failure());
}

void add_list(CLI::App& command, const char* name, std::vector<std::string>& to,
              const char* meaning) {
  command.add_option(name, to, meaning)
      ->delimiter(',')
      ->allow_extra_args(false)
      ->option_text("LIST");
}

}  // namespace

void add_value(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("value", "Evaluate a stored surface at points");
  auto args = std::make_shared<ValueArguments>();
  command->add_option("surface", args->surface, "surfaces/NAME.json of a run")->required();
  add_list(*command, "--strike", args->strikes, "Strikes with commas between, no spaces");
  add_list(*command, "--moneyness", args->moneyness, "Points K/F, likewise");
  add_list(*command, "--log-moneyness", args->log_moneyness, "Points ln(K/F), likewise");
  add_list(*command, "--expiry", args->expiries,
           "Dates or instants, likewise; a date alone is\n"
           "the expiries of the surface on it, else\n"
           "16:00");
  add_list(*command, "--tenor", args->tenors, "Tenors, likewise: 2W,3M,1Y");
  command->add_option("--points", args->points,
                      "A CSV with a column expiry or tenor, and\n"
                      "strike, moneyness or log_moneyness; put_call\n"
                      "and underlying may be there");
  command->add_option("--put-call", args->put_call,
                      "C or P: the side to price, in place of the\n"
                      "one out of the money");
  command->add_flag("--variance-swaps", args->swaps,
                    "Strikes of variance swaps instead, a line an\n"
                    "expiry");
  command->add_option("--zone", args->zone,
                      "IANA time zone of dates and times; without\n"
                      "it that of the run, or its offset if it had\n"
                      "none");
  command->footer(
      "Prints CSV on standard output: vol, price, Greeks, density and local\n"
      "volatility at each point. Without expiries those of the surface, without\n"
      "points K/F = 0.8, 0.9, 1, 1.1, 1.2.\n\n"
      "Examples:\n"
      "  duskgrid value marks/2031-03-14/surfaces/QNOR.json\n"
      "  duskgrid value QNOR.json --strike 2500,2600 --expiry 2031-06-20 --tenor 1M,1Y\n"
      "  duskgrid value QNOR.json --log-moneyness=-0.1,0,0.1 --put-call P\n"
      "  duskgrid value QNOR.json --points positions.csv > values.csv\n"
      "  duskgrid value QNOR.json --variance-swaps --tenor 1M,3M,1Y\n\n"
      "Exit status: 0 done; 64 usage; 65 not such a file; 66 no input; 70 internal.");
  command->callback([args, &status] { status = value(*args); });
}

}  // namespace duskgrid::commands

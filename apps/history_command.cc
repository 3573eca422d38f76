#include <fmt/format.h>

#include <memory>

#include "commands.h"
#include "console.h"
#include "market/dates.h"
#include "market/day_count.h"
#include "publish/history.h"
#include "publish/text.h"

namespace duskgrid::commands {
namespace {

using publish::HistoryNight;
using publish::HistorySlice;

struct HistoryArguments {
  std::string underlying;
  std::string out = "out";
  std::string from, to;
  std::vector<std::string> tenors;
};

constexpr const char* kHeader =
    "date,as_of,underlying,status,carried_from,certified,expiry,tenor,year_fraction,forward,"
    "discount_factor,vol,skew,curvature,used,inside,rms_vol,term_slope,support\n";

Failure usage(const std::string& what) { return {Fault::usage, "", what}; }

// Empty, or a date alone.
bool is_date(const std::string& text) {
  const auto cell = quotes::parse_date_cell(text);
  return text.empty() || (text.size() == 10 && cell && cell->date && !cell->time_of_day);
}

class Printer {
 public:
  explicit Printer(const HistoryNight& night)
      : night_(night), own_(night.underlyings.front()), clock_(night.as_of.clock) {}

  void expiries() const {
    for (const auto& slice : own_.slices) line(&slice, "", "");
  }
  void tenor(const std::string& word) const {
    const auto expiry = market::add_tenor(night_.as_of.instant, *market::parse_tenor(word), clock_);
    const double t = market::year_fraction(night_.as_of.instant, expiry);
    const auto slice = publish::at_maturity(own_.slices, expiry, t);
    if (!slice) return;
    const bool inside =
        t >= own_.slices.front().year_fraction && t <= own_.slices.back().year_fraction;
    line(&*slice, word, inside ? "interpolated" : "extrapolated");
  }
  // A night without a surface has a line that says so.
  void nothing() const { line(nullptr, "", ""); }

 private:
  void line(const HistorySlice* slice, const std::string& tenor, const char* support) const {
    using publish::csv_number;
    const auto& r = own_.record;
    fmt::print("{},{},{},{},{},{}", night_.date,
               quotes::format_instant(clock_, night_.as_of.instant), publish::csv_text(r.name),
               publish::word(r.status), r.carried_from, r.certified ? "yes" : "no");
    if (!slice) {
      fmt::print("{:,>{}}\n", "", 13);
      return;
    }
    fmt::print(",{},{}", quotes::format_instant(clock_, slice->expiry), tenor);
    for (const double value : {slice->year_fraction, slice->forward, slice->discount_factor,
                               slice->vol, slice->skew, slice->curvature})
      fmt::print(",{}", csv_number(value));
    if (tenor.empty())
      fmt::print(",{},{},{}", slice->used, slice->inside, csv_number(slice->rms_vol));
    else
      fmt::print(",,,");
    fmt::print(",{},{}\n", csv_number(own_.term_slope), support);
  }

  const HistoryNight& night_;
  const publish::HistoryUnderlying& own_;
  const quotes::Clock& clock_;
};

Result<std::vector<HistoryNight>> read_series(const HistoryArguments& args) {
  if (!is_date(args.from) || !is_date(args.to))
    return usage("--from and --to must be dates like 2031-03-14");
  if (!args.to.empty() && args.from > args.to) return usage("--from is after --to");
  for (const auto& tenor : args.tenors)
    if (!market::parse_tenor(tenor))
      return usage("--tenor = " + tenor + ", must be like 2W, 3M or 1Y");
  auto history = publish::History::open(args.out + "/" + publish::History::kFileName,
                                        publish::History::Access::read);
  if (!history) return history.failure();
  return (*history)->series(args.underlying, args.from, args.to);
}

int history(const HistoryArguments& args) {
  const auto nights = read_series(args);
  if (!nights) return console::report(nights.failure());
  fmt::print("{}", kHeader);
  if (nights->empty()) {
    fmt::print(stderr, "duskgrid: no night of {} in {}\n", args.underlying, args.out);
    return console::kNotAllPublished;
  }
  for (const auto& night : *nights) {
    const Printer printer(night);
    if (night.underlyings.front().slices.empty()) {
      printer.nothing();
      continue;
    }
    if (args.tenors.empty()) printer.expiries();
    for (const auto& tenor : args.tenors) printer.tenor(tenor);
  }
  return console::kDone;
}

}  // namespace

void add_history(CLI::App& program, int& status) {
  auto* command = program.add_subcommand("history", "An underlying over the nights of a folder");
  auto args = std::make_shared<HistoryArguments>();
  command->add_option("underlying", args->underlying, "Name as files write it")->required();
  command->add_option("--out", args->out, "Folder that build was given")->capture_default_str();
  command->add_option("--from", args->from, "First date; without it the first known")
      ->option_text("DATE");
  command->add_option("--to", args->to, "Last date; without it the last known")
      ->option_text("DATE");
  command
      ->add_option("--tenor", args->tenors,
                   "Constant maturities, with commas between, in\n"
                   "place of the expiries: 1M,3M,1Y")
      ->delimiter(',')
      ->allow_extra_args(false)
      ->option_text("LIST");
  command->footer(
      "Prints CSV on standard output: a line a night and expiry, with at-the-money\n"
      "volatility, skew and curvature in log-moneyness, forward and fit.\n\n"
      "Examples:\n"
      "  duskgrid history QNOR --out marks\n"
      "  duskgrid history QNOR --out marks --tenor 1M,3M --from 2031-01-01 > qnor.csv\n\n"
      "Exit status: 0 printed; 4 nothing known of it in those dates; 64 usage;\n"
      "66 no history, or one that cannot be read; 70 internal.");
  command->callback([args, &status] { status = history(*args); });
}

}  // namespace duskgrid::commands

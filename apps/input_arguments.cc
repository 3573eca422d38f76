#include "input_arguments.h"

namespace duskgrid::commands {
namespace {

bool is_configuration(const std::string& path) { return path.ends_with(".toml"); }

Failure usage(const std::string& what) { return {Fault::usage, "", what}; }

}  // namespace

void InputArguments::add_to(CLI::App& command) {
  command
      .add_option("inputs", inputs,
                  "Quote files (CSV, gzip or zstd; globs in\n"
                  "quotes), or a configuration NIGHT.toml, or\n"
                  "both when its one [[source]] names no files")
      ->required();
  command.add_option("--as-of", as_of,
                     "Instant the quotes stand for, such as\n"
                     "2031-03-14T16:00; a date alone is 16:00. UTC\n"
                     "without an offset in it or a zone");
  command.add_option("--zone", zone,
                     "IANA time zone of dates and times, such as\n"
                     "America/New_York");
  command
      .add_option("--exercise", exercise,
                  "Exercise style where the files do not say:\n"
                  "european or american; european without it")
      ->check(CLI::IsMember({"european", "american"}))
      ->option_text("STYLE");
}

Result<night::NightConfig> InputArguments::config() const {
  night::NightConfig config;
  std::vector<std::string> files;
  bool configured = false;
  for (const auto& input : inputs) {
    if (!is_configuration(input)) {
      files.push_back(input);
      continue;
    }
    if (configured) return usage("only one configuration a night");
    auto read = night::read_config(input);
    if (!read) return read.failure();
    config = std::move(*read);
    configured = true;
  }
  if (!files.empty() && config.sources.empty()) config.sources.emplace_back();
  if (!files.empty()) {
    if (config.sources.size() != 1 || !config.sources[0].files.empty())
      return usage(
          "files on the command line need a configuration whose one [[source]] names none");
    config.sources[0].files = files;
  }
  if (config.sources.empty()) return usage("no quote files: name them here or in [[source]] files");
  for (const auto& source : config.sources)
    if (source.files.empty())
      return usage("a [[source]] has no files; name them on the command line");
  if (!as_of.empty()) config.as_of_text = as_of;
  if (!zone.empty()) {
    if (const auto problem = quotes::Clock{zone, {}}.problem()) return usage("--" + *problem);
    config.zone = zone;
  }
  if (!exercise.empty())
    config.exercise =
        exercise == "american" ? quotes::Exercise::american : quotes::Exercise::european;
  return config;
}

}  // namespace duskgrid::commands

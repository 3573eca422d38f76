// Quote files or a configuration on the command line: what build and survey share.
#pragma once

#include <CLI/CLI.hpp>
#include <string>
#include <vector>

#include "night/config.h"

namespace duskgrid::commands {

struct InputArguments {
  std::vector<std::string> inputs;
  std::string as_of;
  std::string zone;
  std::string exercise;

  void add_to(CLI::App& command);
  // The configuration with the files of the command line in it. Files named beside a
  // configuration are read by its one source.
  Result<night::NightConfig> config() const;
};

}  // namespace duskgrid::commands

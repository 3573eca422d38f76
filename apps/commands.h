// The commands of duskgrid. Each adds itself to the program and, when chosen, leaves its
// exit status.
#pragma once

#include <CLI/CLI.hpp>

namespace duskgrid::commands {

void add_build(CLI::App& program, int& status);
void add_survey(CLI::App& program, int& status);
void add_check(CLI::App& program, int& status);
void add_value(CLI::App& program, int& status);
void add_compare(CLI::App& program, int& status);
void add_history(CLI::App& program, int& status);

}  // namespace duskgrid::commands

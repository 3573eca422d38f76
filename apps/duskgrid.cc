// duskgrid: a night's option quotes in, arbitrage-free volatility grids out.
#include <fmt/format.h>

#include <cerrno>
#include <cstdio>
#include <cstring>
#include <exception>
#include <string_view>

#include "commands.h"
#include "console.h"

namespace {

// What was printed may still be on its way: a full disk or a closed pipe shows only now.
int flushed(int status) {
  using duskgrid::console::kCannotCreate;
  if (std::fflush(stdout) == 0 && std::ferror(stdout) == 0) return status;
  fmt::print(stderr, "duskgrid: standard output cannot be written: {}; what it shows is cut off\n",
             std::strerror(errno));
  return kCannotCreate;
}

// Arguments that are too many and look like an option: no list with spaces in it.
bool names_option(std::string_view what) { return what.find(" -") != what.npos; }

int unknown_command(const char* word) {
  fmt::print(stderr,
             "duskgrid: {} is no command; there are build, survey, check, value, compare and "
             "history\n",
             word);
  return duskgrid::console::kUsage;
}

}  // namespace

int main(int argc, char** argv) {
  using namespace duskgrid;
  CLI::App program{
      "Turns a night's bid/ask option quote files into arbitrage-free\n"
      "implied-volatility grids, and accounts for every quote in them.",
      "duskgrid"};  // not the path it was called by, which may be of any length
  program.set_version_flag("--version", std::string("duskgrid ") + DUSKGRID_VERSION);
  program.require_subcommand(1);
  program.footer(
      "duskgrid COMMAND --help shows the options of a command, with examples.\n"
      "Marks need independent validation; nothing here is advice to trade.");
  int status = console::kInternal;
  commands::add_build(program, status);
  commands::add_survey(program, status);
  commands::add_check(program, status);
  commands::add_value(program, status);
  commands::add_compare(program, status);
  commands::add_history(program, status);
  try {
    program.parse(argc, argv);
  } catch (const CLI::ExtrasError& error) {
    program.exit(error);
    if (!names_option(error.what()))
      fmt::print(stderr, "Several values of one option have commas between: --strike 90,100,110\n");
    return console::kUsage;
  } catch (const CLI::RequiredError& error) {
    if (argc > 1 && argv[1][0] != '-' && program.get_subcommands().empty())
      return unknown_command(argv[1]);
    return program.exit(error), console::kUsage;
  } catch (const CLI::ParseError& error) {
    return program.exit(error) == 0 ? console::kDone : console::kUsage;
  } catch (const std::exception& error) {
    if (std::ferror(stdout) != 0) return flushed(status);
    fmt::print(stderr, "duskgrid: internal error: {}\n", error.what());
    return console::kInternal;
  }
  return flushed(status);
}

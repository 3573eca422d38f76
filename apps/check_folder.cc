#include "check_folder.h"

#include <fmt/format.h>

#include "console.h"
#include "publish/run_audit.h"

namespace duskgrid::commands {
namespace {

using console::grouped;

void print_line(const char* label, const std::string& text) {
  fmt::print("  {:<10}{}\n", label, text);
}

void print_account(const std::string& folder, const publish::RunAudit& audit) {
  const auto& run = audit.record;
  fmt::print("{}: night of {}, made by duskgrid {}\n", folder,
             quotes::format_instant(run.as_of.clock, run.as_of.instant), run.version);
  print_line("run.json", "SHA-256 " + audit.run_sha256);
  print_line("files", fmt::format("{} of {} as run.json says", grouped(audit.files),
                                  grouped(std::ssize(run.outputs))));
  print_line("rows",
             fmt::format("{} in ledger.csv; {} read = {} used + {} spare + {} dropped",
                         grouped(audit.rows), grouped(run.rows.read), grouped(run.rows.used),
                         grouped(run.rows.spare), grouped(run.rows.dropped)));
  print_line("surfaces", fmt::format("{}, of which {} proved free of arbitrage again",
                                     grouped(audit.surfaces), grouped(audit.proved)));
  print_line("grid", fmt::format("{} nodes, of which {} are what the surfaces give",
                                 grouped(audit.nodes), grouped(audit.same_nodes)));
  print_line("inputs", fmt::format("{} of {} still there as they were read", grouped(audit.inputs),
                                   grouped(std::ssize(run.inputs))));
}

}  // namespace

Result<bool> check_folder(const std::string& folder) {
  const auto audit = publish::audit_run(folder);
  if (!audit) return audit.failure();
  print_account(folder, *audit);
  for (const auto& note : audit->notes) fmt::print("note: {}\n", note);
  for (const auto& finding : audit->findings)
    fmt::print("finding: {}{}{}\n", finding.file, finding.file.empty() ? "" : ": ", finding.what);
  const auto n = audit->findings.size();
  fmt::print("{}\n", n == 0   ? "sound: the folder is what run.json says"
                     : n == 1 ? "not sound: 1 finding"
                              : fmt::format("not sound: {} findings", n));
  return n == 0;
}

}  // namespace duskgrid::commands

// A published folder held against its own account: whether what is there is what run.json says,
// and whether what it says is true. Not for judging marks: a sound folder may hold poor ones.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "publish/run_record.h"
#include "quotes/result.h"

namespace duskgrid::publish {

struct AuditFinding {
  std::string file;  // relative to the folder
  std::string what;
};

struct RunAudit {
  RunRecord record;
  std::string run_sha256;              // of run.json itself, which names all other sums
  std::vector<AuditFinding> findings;  // empty for a sound folder
  std::vector<std::string> notes;      // of things outside the folder, or that cannot be judged
  // What was looked at and was as it should be.
  std::int64_t files = 0;       // of record.outputs
  std::int64_t rows = 0;        // lines of the ledger
  std::int64_t surfaces = 0;    // read back
  std::int64_t proved = 0;      // of those, proved free of arbitrage again
  std::int64_t nodes = 0;       // lines of the grid
  std::int64_t same_nodes = 0;  // of those, the strike and vol that the surface gives
  std::int64_t inputs = 0;      // still there as they were read
};

// Looks at every file. Findings: a file that is missing, has another SHA-256 or is not listed;
// counts that do not add up or are not those of the tables; a surface that cannot be read, is of
// another night, or is not proved though said to be certified; a node of the grid whose strike,
// volatility (1e-12 relative: the last digits of another machine's logarithms), forward or discount
// factor is not what its surface gives; expiries without nodes. Notes: an input that has changed or
// is gone (names as in run.json, from the working directory); another version's run; carried names,
// whose nodes are not asked again.
// Failures: no_input where there is no run.json, or the folder is replaced meanwhile; not_quotes
// where run.json is no such account.
Result<RunAudit> audit_run(const std::string& folder);

}  // namespace duskgrid::publish

// Reading points at which a surface is wanted from CSV.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "publish/values.h"

namespace duskgrid::publish {

struct WantedPoint {
  std::int64_t line;  // in the file, header 1
  std::string underlying;
  std::string expiry;  // a date or instant as written; empty where the row has only a tenor
  std::string tenor;   // as written; may be empty
  ValuePoint point;
};

// Needs a column expiry or tenor, and strike, moneyness or log_moneyness (the first of these that
// is there); takes put_call and underlying where there. Failure: no_input for a missing file,
// not_quotes with the line for anything that is not such a file.
Result<std::vector<WantedPoint>> read_points(const std::string& path);

}  // namespace duskgrid::publish

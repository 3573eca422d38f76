// Large tables formatted by several threads and written in order. What a line looks like:
// tables.h.
#pragma once

#include <cstdint>
#include <functional>
#include <string>

#include "publish/run_folder.h"
#include "publish/tables.h"

namespace duskgrid::publish {

// Adds the lines of items first to last - 1 to `out`. Called by several threads at once, with
// InstantTexts of their own.
using FormatLines = std::function<void(std::size_t first, std::size_t last, std::string& out,
                                       InstantTexts& instants)>;

// Writes the lines of `count` items, `at_a_time` of them formatted together: some thousand lines,
// a fraction of a megabyte, do well. The bytes do not depend on the number of threads.
void write_lines(RunFile& file, std::size_t count, std::size_t at_a_time,
                 const quotes::Clock& clock, const FormatLines& format);

}  // namespace duskgrid::publish

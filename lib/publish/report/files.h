// The files of this folder as they were when the program was built, made by embed.cmake.
#pragma once

#include <string_view>

namespace duskgrid::publish::files {

extern const std::string_view d3, d3_licence;
extern const std::string_view index_page, underlying_page, style;
// Parts of the scripts: what both pages need, what each needs.
extern const std::string_view common, index_script;
extern const std::string_view frame, smile, surface, forward, ledger, changes, page_script;

}  // namespace duskgrid::publish::files

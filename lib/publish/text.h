// How names and numbers are written into files: CSV cells, file names, digests. Not for
// what the files hold: tables.h, surface_json.h, run_record.h.
#pragma once

#include <optional>
#include <string>
#include <string_view>

namespace duskgrid::publish {

// A text cell for CSV (RFC 4180 quoting). A cell that a spreadsheet would run (first
// character = + - @ tab or carriage return) gets a leading apostrophe, and so does one that
// would be taken for a guarded cell.
std::string csv_text(std::string_view text);
// The text of such a cell once unquoted: the guarding apostrophe taken off again.
std::string unguarded(std::string_view cell);
// True where csv_text() would only copy.
bool csv_plain(std::string_view text);
// Shortest decimal that reads back to the same double; empty for what is not finite; no
// negative zero.
std::string csv_number(double value);
// The same at the end of a text.
void add_csv_number(double value, std::string& to);

// A name as a file name, and back: letters, digits, _ and - stay, and a dot inside; every
// other byte is %XX in upper-case hexadecimal. Empty gives "%". Never "." or "..", never longer
// than three times the name.
std::string encode_file_name(std::string_view name);
// Nothing for text that encode_file_name() does not give.
std::optional<std::string> decode_file_name(std::string_view file_name);

}  // namespace duskgrid::publish

// The text inside a file: opened, decompressed by content, and checked to be UTF-8.
// Not for lines and cells: rows.h.
#pragma once

#include <cstdint>
#include <memory>
#include <optional>
#include <string>

#include "quotes/result.h"

namespace duskgrid::quotes {

// Streams the text of one file. Holds a buffer of compressed bytes at most, never
// the whole file, so that what a small file expands to costs no memory here.
class TextSource {
 public:
  // no_input when the file is missing, unreadable or a folder.
  static Result<std::unique_ptr<TextSource>> open(const std::string& path);
  virtual ~TextSource() = default;

  // Fills all `size` bytes unless the text ends before; a line feed is added to a
  // last line without one. Returns 0 at the end, and after a failure.
  virtual std::size_t read(char* to, std::size_t size) = 0;

  // Set when the text ended early: damaged compression, no UTF-8, a reading error.
  // To be asked after the last read.
  virtual const std::optional<Failure>& failure() const = 0;
  virtual const std::string& compression() const = 0;  // "none", "gzip", "zstd"
  virtual std::int64_t stored_bytes() const = 0;       // read from the file so far
  // SHA-256 of the stored bytes read so far, as lower-case hexadecimal; ends the sum, call once.
  virtual std::string sha256() = 0;
};

}  // namespace duskgrid::quotes

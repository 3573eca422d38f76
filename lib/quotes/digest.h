// SHA-256 (FIPS 180-4) of bytes and files, as lower-case hexadecimal.
#pragma once

#include <memory>
#include <string>
#include <string_view>

#include "quotes/result.h"

namespace duskgrid::quotes {

// Takes bytes as they come.
class Sha256 {
 public:
  Sha256();
  void add(std::string_view bytes);
  std::string hex();  // ends the sum; call once

 private:
  struct End {
    void operator()(void* context) const;
  };
  std::unique_ptr<void, End> context_;
};

struct FileDigest {
  std::string sha256;
  std::int64_t bytes;
};
// Failure: no_input when the file cannot be read to its end.
Result<FileDigest> digest_file(const std::string& path);

}  // namespace duskgrid::quotes

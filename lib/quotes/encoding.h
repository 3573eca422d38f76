// Is this text? UTF-8 without NUL bytes, checked as the bytes stream past. Not for
// converting: other encodings are named and refused.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <string_view>

namespace duskgrid::quotes {

// "UTF-16 (little-endian)" and the like when `start`, the first bytes of a text,
// carries the byte-order mark of an encoding other than UTF-8.
std::optional<std::string_view> foreign_encoding(std::string_view start);

// Checks a text handed over piece by piece; a character may straddle two pieces.
class TextCheck {
 public:
  // False once the text is known to be no UTF-8; problem() then says why. O(n).
  bool feed(std::string_view piece);
  // To be called after the last piece: a character cut off at the end is a problem.
  bool finish();
  // What is wrong and on which physical line (first line 1); empty when all is well.
  const std::string& problem() const { return problem_; }

 private:
  std::size_t skip_ascii(std::string_view piece, std::size_t from);
  bool accept(unsigned char byte);
  bool refuse(std::string_view what);

  std::int64_t lines_ = 1;
  int awaited_ = 0;                               // continuation bytes still to come
  unsigned char lowest_ = 0x80, highest_ = 0xBF;  // range of the next one
  std::string problem_;
};

}  // namespace duskgrid::quotes

#include "quotes/encoding.h"

#include <algorithm>
#include <array>
#include <bit>
#include <cstring>

namespace duskgrid::quotes {
namespace {

using namespace std::string_view_literals;

constexpr std::uint64_t kOnes = 0x0101010101010101U;
constexpr std::uint64_t kHighs = 0x8080808080808080U;

// A high bit for each zero byte of `word`; exact for every byte, unlike the shorter
// (word - kOnes) & ~word & kHighs, which may mark a 1 above a 0.
constexpr std::uint64_t zero_bytes(std::uint64_t word) {
  return ~(((word & ~kHighs) + ~kHighs) | word | ~kHighs);
}

// The byte-order marks, the longer ones first: FF FE opens both UTF-16 and UTF-32.
struct Mark {
  std::string_view bytes;
  std::string_view encoding;
};
constexpr std::array<Mark, 4> kMarks{{
    {"\xFF\xFE\0\0"sv, "UTF-32 (little-endian)"},
    {"\0\0\xFE\xFF"sv, "UTF-32 (big-endian)"},
    {"\xFF\xFE"sv, "UTF-16 (little-endian)"},
    {"\xFE\xFF"sv, "UTF-16 (big-endian)"},
}};

}  // namespace

std::optional<std::string_view> foreign_encoding(std::string_view start) {
  for (const Mark& mark : kMarks) {
    if (start.starts_with(mark.bytes)) return mark.encoding;
  }
  return std::nullopt;
}

bool TextCheck::refuse(std::string_view what) {
  if (problem_.empty()) {
    problem_.append("line ").append(std::to_string(lines_)).append(" has ").append(what);
  }
  return false;
}

// Quote files are nearly all ASCII, so eight bytes are judged at a time.
std::size_t TextCheck::skip_ascii(std::string_view piece, std::size_t from) {
  std::size_t i = from;
  for (; i + sizeof(std::uint64_t) <= piece.size(); i += sizeof(std::uint64_t)) {
    std::uint64_t word;
    std::memcpy(&word, piece.data() + i, sizeof word);
    if (((word & kHighs) | zero_bytes(word)) != 0) break;
    // Most words have no line feed, and a count of bits is a call on plain x86-64.
    const std::uint64_t feeds = zero_bytes(word ^ (kOnes * '\n'));
    if (feeds != 0) lines_ += std::popcount(feeds);
  }
  return i;
}

// One byte by the table of well-formed UTF-8 (Unicode standard, table 3-7): only the
// second byte has a range that depends on the first.
bool TextCheck::accept(unsigned char byte) {
  if (awaited_ > 0) {
    if (byte < lowest_ || byte > highest_) return refuse("bytes that are not UTF-8");
    --awaited_;
    lowest_ = 0x80;
    highest_ = 0xBF;
    return true;
  }
  if (byte == 0) return refuse("a NUL byte");
  if (byte < 0x80) {
    lines_ += byte == '\n';
    return true;
  }
  if (byte < 0xC2 || byte > 0xF4) return refuse("bytes that are not UTF-8");
  awaited_ = byte < 0xE0 ? 1 : byte < 0xF0 ? 2 : 3;
  if (byte == 0xE0) lowest_ = 0xA0;   // no overlong forms
  if (byte == 0xED) highest_ = 0x9F;  // no surrogates
  if (byte == 0xF0) lowest_ = 0x90;
  if (byte == 0xF4) highest_ = 0x8F;  // nothing past U+10FFFF
  return true;
}

bool TextCheck::feed(std::string_view piece) {
  if (!problem_.empty()) return false;
  for (std::size_t i = 0; i < piece.size();) {
    if (awaited_ == 0) i = skip_ascii(piece, i);
    // After the run a few bytes by hand: to the next whole ASCII word or the end.
    const std::size_t stop = std::min(piece.size(), i + sizeof(std::uint64_t));
    for (; i < stop; ++i) {
      if (!accept(static_cast<unsigned char>(piece[i]))) return false;
    }
  }
  return true;
}

bool TextCheck::finish() {
  if (!problem_.empty()) return false;
  return awaited_ == 0 || refuse("a UTF-8 character cut off by the end of the file");
}

}  // namespace duskgrid::quotes

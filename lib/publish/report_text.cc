#include "publish/report_text.h"

#include <algorithm>
#include <array>
#include <cmath>

#include "quotes/digest.h"

namespace duskgrid::publish {
namespace {

bool continues(std::string_view text, std::size_t at, unsigned char lowest, unsigned char highest) {
  if (at >= text.size()) return false;
  const auto byte = static_cast<unsigned char>(text[at]);
  return byte >= lowest && byte <= highest;
}

// Bytes of the UTF-8 character that starts at `at`, 0 when there is none (Unicode 15, table 3-7).
std::size_t character_at(std::string_view text, std::size_t at) {
  const auto lead = static_cast<unsigned char>(text[at]);
  if (lead < 0x80) return 1;
  if (lead < 0xC2 || lead > 0xF4) return 0;
  const std::size_t size = lead < 0xE0 ? 2 : lead < 0xF0 ? 3 : 4;
  const unsigned char lowest = lead == 0xE0 ? 0xA0 : lead == 0xF0 ? 0x90 : 0x80;
  const unsigned char highest = lead == 0xED ? 0x9F : lead == 0xF4 ? 0x8F : 0xBF;
  if (!continues(text, at + 1, lowest, highest)) return 0;
  for (std::size_t i = 2; i < size; ++i)
    if (!continues(text, at + i, 0x80, 0xBF)) return 0;
  return size;
}

bool plain(unsigned char c) {
  return c >= 0x20 && c < 0x7F && c != '"' && c != '\\' && c != '<' && c != '>' && c != '&';
}

// A character that is not plain ASCII.
void append_escaped(std::string& out, std::string_view character) {
  const auto byte = static_cast<unsigned char>(character[0]);
  if (character == "\xE2\x80\xA8" || character == "\xE2\x80\xA9")
    fmt::format_to(std::back_inserter(out), "\\u{:04x}", 0x2000 + (character[2] & 0x3F));
  else if (character.size() > 1)
    out += character;
  else if (byte == '"' || byte == '\\')
    (out += '\\') += character[0];
  else
    fmt::format_to(std::back_inserter(out), "\\u{:04x}", byte);
}

std::string_view markup_of(char c) {
  switch (c) {
    case '<': return "&lt;";
    case '>': return "&gt;";
    case '&': return "&amp;";
    case '"': return "&quot;";
    case '\'': return "&#39;";
    default: return {};
  }
}

constexpr std::array<double, 18> kPowers{1e0, 1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,  1e8,
                                         1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17};

// Digits before the point of a number from 1e-7 to below 1e9, less one: floor(log10).
int exponent_of(double size) {
  int exponent = 0;
  while (size >= kPowers[static_cast<std::size_t>(exponent) + 1]) ++exponent;
  while (size < 1) {
    size *= 10;
    --exponent;
  }
  return exponent;
}

int digit_of(char hex) { return hex <= '9' ? hex - '0' : hex - 'a' + 10; }

}  // namespace

void append_rounded(std::string& out, double value, int digits) {
  constexpr double kLeast = 1e-7, kMost = 1e9;
  const double size = std::abs(value);
  const bool ordinary = size >= kLeast && size < kMost;
  const int decimals = ordinary ? digits - 1 - exponent_of(size) : -1;
  if (decimals < 0) {  // zero, very large or very small, or digits cut before the point
    fmt::format_to(std::back_inserter(out), "{:.{}g}", value + 0.0, digits);
    return;
  }
  // At most 10^9 + 1, and so an integer without loss.
  auto scaled = std::llround(size * kPowers[static_cast<std::size_t>(decimals)]);
  int places = decimals;
  for (; places > 0 && scaled % 10 == 0; --places) scaled /= 10;
  std::array<char, 32> text;
  auto at = text.end();
  for (int i = 0; i <= places || scaled > 0; ++i, scaled /= 10) {
    if (i == places && places > 0) *--at = '.';
    *--at = static_cast<char>('0' + scaled % 10);
  }
  if (value < 0) *--at = '-';
  out.append(at, text.end());
}

JsonText& JsonText::text(std::string_view value) {
  comma();
  out_ += '"';
  for (std::size_t i = 0; i < value.size();) {
    if (plain(static_cast<unsigned char>(value[i]))) {
      out_ += value[i++];
      continue;
    }
    const std::size_t size = character_at(value, i);
    if (size == 0)
      out_ += "\xEF\xBF\xBD";
    else
      append_escaped(out_, value.substr(i, size));
    i += std::max<std::size_t>(size, 1);
  }
  out_ += '"';
  return *this;
}

std::string html_text(std::string_view text) {
  std::string out;
  for (const char c : text) {
    const auto markup = markup_of(c);
    if (markup.empty())
      out += c;
    else
      out += markup;
  }
  return out;
}

std::string fill_template(
    std::string_view page,
    const std::vector<std::pair<std::string_view, std::string_view>>& values) {
  std::string out;
  std::size_t size = page.size();
  for (const auto& [name, value] : values) size += value.size();
  out.reserve(size);
  while (true) {
    const auto open = page.find("{{");
    out += page.substr(0, open);
    if (open == std::string_view::npos) return out;
    const auto close = page.find("}}", open);
    const auto name = page.substr(open + 2, close - open - 2);
    for (const auto& [known, value] : values)
      if (known == name) out += value;
    page.remove_prefix(close + 2);
  }
}

std::string policy_hash(std::string_view text) {
  constexpr std::string_view kLetters =
      "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
  quotes::Sha256 sum;
  sum.add(text);
  const std::string hex = sum.hex();
  // Base64 (RFC 4648, section 4) of the 32 bytes: three hexadecimal digits make two letters.
  std::string out = "'sha256-";
  for (std::size_t i = 0; i < hex.size(); i += 3) {
    const auto digit = [&](std::size_t j) { return i + j < hex.size() ? digit_of(hex[i + j]) : 0; };
    const auto bits = static_cast<std::size_t>(digit(0) << 8 | digit(1) << 4 | digit(2));
    out += kLetters[bits >> 6];
    if (i + 1 < hex.size()) out += kLetters[bits & 63];
  }
  return out + "='";
}

}  // namespace duskgrid::publish

#include "console.h"

#include <fmt/format.h>
#include <unistd.h>

#include <algorithm>
#include <array>
#include <cctype>
#include <cstdio>
#include <cstdlib>

namespace duskgrid::console {
namespace {

// Code points of UTF-8 text: what a terminal shows one cell for, wide scripts apart.
std::size_t width_of(std::string_view text) {
  return static_cast<std::size_t>(std::count_if(text.begin(), text.end(), [](char c) {
    return (static_cast<unsigned char>(c) & 0xC0) != 0x80;
  }));
}

std::string padded(const std::string& text, std::size_t width, bool to_the_right) {
  const std::size_t own = width_of(text);
  const std::string space(width > own ? width - own : 0, ' ');
  return to_the_right ? space + text : text + space;
}

}  // namespace

int exit_status(Fault fault) {
  switch (fault) {
    case Fault::usage: return kUsage;
    case Fault::not_quotes: return kNotQuotes;
    case Fault::no_input: return kNoInput;
    case Fault::cannot_create: return kCannotCreate;
    case Fault::configuration: return kConfiguration;
    default: return kInternal;
  }
}

int report(const Failure& failure) {
  fmt::print(stderr, "duskgrid: {}\n", failure.text());
  return exit_status(failure.fault);
}

bool coloured() {
  const char* forbidden = std::getenv("NO_COLOR");
  return isatty(STDERR_FILENO) != 0 && (forbidden == nullptr || *forbidden == 0);
}

std::string in_colour(const std::string& text, Colour colour) {
  constexpr std::array<const char*, 4> kCodes{"", "\033[36m", "\033[33m", "\033[35m"};
  if (colour == Colour::plain || !coloured()) return text;
  return kCodes[static_cast<std::size_t>(colour)] + text + "\033[0m";
}

ProgressLine::ProgressLine(bool quiet) : active_(!quiet && isatty(STDERR_FILENO) != 0) {}

ProgressLine::~ProgressLine() { clear(); }

void ProgressLine::show(std::string_view stage, std::int64_t done, std::int64_t total) {
  if (!active_) return;
  if (stage != stage_) {
    stage_ = stage;
    began_ = std::chrono::steady_clock::now();
    last_permille_ = -1;
  }
  const int permille = total > 0 ? static_cast<int>(1000 * done / total) : -1;
  if (total > 0 && permille == last_permille_) return;
  last_permille_ = permille;
  shown_ = true;
  if (total == 0) {
    fmt::print(stderr, "\r\033[K{} ...", stage);
  } else {
    constexpr int kBar = 30;
    const int filled = static_cast<int>(kBar * done / total);
    const std::chrono::duration<double> spent = std::chrono::steady_clock::now() - began_;
    fmt::print(stderr, "\r\033[K{} {:=<{}}{:.<{}} {}/{}  {}", stage, "", filled, "", kBar - filled,
               grouped(done), grouped(total), pace(done, total, spent.count()));
  }
  std::fflush(stderr);
}

void ProgressLine::clear() {
  if (shown_) fmt::print(stderr, "\r\033[K");
  shown_ = false;
}

Table::Table(std::vector<std::string> headers) : headers_(std::move(headers)) {
  for (auto& header : headers_) {
    to_the_right_.push_back(header.starts_with('>'));
    if (header.starts_with('>')) header.erase(0, 1);
  }
}

void Table::add(std::vector<std::string> cells) { rows_.push_back({std::move(cells), ""}); }
void Table::tint(std::size_t column, Colour colour) {
  rows_.back().tinted = column;
  rows_.back().colour = colour;
}
void Table::remark(std::string text) { rows_.back().remark = std::move(text); }

std::string Table::text() const {
  std::vector<std::size_t> widths;
  for (std::size_t c = 0; c < headers_.size(); ++c) {
    widths.push_back(width_of(headers_[c]));
    for (const auto& row : rows_) widths[c] = std::max(widths[c], width_of(row.cells[c]));
  }
  const auto line = [&](const std::vector<std::string>& cells, std::size_t tinted, Colour colour) {
    std::string out;
    for (std::size_t c = 0; c < cells.size(); ++c) {
      if (c > 0) out += "  ";
      const auto cell = padded(cells[c], widths[c], to_the_right_[c]);
      out += c == tinted ? in_colour(cell, colour) : cell;
    }
    out.erase(out.find_last_not_of(' ') + 1);
    return out + '\n';
  };
  std::string out = line(headers_, 0, Colour::plain);
  for (const auto& row : rows_) out += line(row.cells, row.tinted, row.colour) + row.remark;
  return out;
}

std::string grouped(std::int64_t n) {
  std::string digits = fmt::format("{}", n < 0 ? -n : n);
  for (int i = static_cast<int>(digits.size()) - 3; i > 0; i -= 3)
    digits.insert(static_cast<std::size_t>(i), ",");
  return n < 0 ? "-" + digits : digits;
}

std::string clock_text(double seconds) {
  const auto whole = static_cast<std::int64_t>(seconds + 0.5);
  if (whole >= 3600)
    return fmt::format("{}:{:02}:{:02}", whole / 3600, whole / 60 % 60, whole % 60);
  return fmt::format("{}:{:02}", whole / 60, whole % 60);
}

std::string pace(std::int64_t done, std::int64_t total, double seconds) {
  constexpr double kTooSoon = 0.2;  // seconds
  if (done <= 0 || seconds < kTooSoon) return "";
  const double rate = static_cast<double>(done) / seconds;
  return fmt::format(
      "{}/s  {} left",
      rate < 10 ? fmt::format("{:.1f}", rate) : grouped(static_cast<std::int64_t>(rate)),
      clock_text(static_cast<double>(total - done) / rate));
}

bool writes_utf8() {
  for (const char* name : {"LC_ALL", "LC_CTYPE", "LANG"}) {
    const char* value = std::getenv(name);
    if (value == nullptr || *value == 0) continue;  // the first that is set decides (POSIX)
    std::string folded;
    for (const char* c = value; *c != 0; ++c)
      if (*c != '-') folded += static_cast<char>(std::tolower(static_cast<unsigned char>(*c)));
    return folded.find("utf8") != std::string::npos;
  }
  return false;
}

std::string shortened(std::string_view text, std::size_t width) {
  if (width_of(text) <= width) return std::string(text);
  std::size_t end = 0;
  for (std::size_t shown = 0; end < text.size(); ++end) {
    const bool begins = (static_cast<unsigned char>(text[end]) & 0xC0) != 0x80;
    if (begins && ++shown == width) break;
  }
  return std::string(text.substr(0, end)) + "~";
}

std::string wrapped(std::string_view text, std::size_t width, std::size_t indent) {
  std::string out, line;
  const auto flush = [&] {
    if (!line.empty()) out += std::string(indent, ' ') + line + '\n';
    line.clear();
  };
  while (!text.empty()) {
    const std::size_t space = std::min(text.find(' '), text.size());
    const std::string_view word = text.substr(0, space);
    if (!line.empty() && indent + width_of(line) + 1 + width_of(word) > width) flush();
    line += (line.empty() ? "" : " ") + std::string(word);
    text.remove_prefix(std::min(space + 1, text.size()));
  }
  flush();
  return out;
}

}  // namespace duskgrid::console

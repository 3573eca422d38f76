// How the report writes data into a page: JSON that no browser takes for markup, and templates.
// For report*.cc alone.
#pragma once

#include <fmt/format.h>

#include <cmath>
#include <cstdint>
#include <iterator>
#include <optional>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

namespace duskgrid::publish {

// Appends a finite number rounded to 1 to 9 significant digits, without trailing zeros.
void append_rounded(std::string& out, double value, int digits);

// JSON written into one buffer. Besides what JSON asks for, `<`, `>`, `&`, U+2028 and U+2029 are
// escaped, so that the text may stand inside a script element; bytes that are not UTF-8 become
// U+FFFD. Numbers that are not finite are null.
class JsonText {
 public:
  JsonText& open(char bracket) {
    comma();
    out_ += bracket;
    first_ = true;
    return *this;
  }
  JsonText& close(char bracket) {
    out_ += bracket;
    first_ = false;
    return *this;
  }
  JsonText& key(std::string_view name) {
    text(name);
    out_ += ':';
    first_ = true;
    return *this;
  }
  JsonText& text(std::string_view value);
  // `digits` significant ones; 0 for as many as read back to the same double.
  JsonText& number(double value, int digits = 0) {
    comma();
    if (!std::isfinite(value))
      out_ += "null";
    else if (digits == 0)
      fmt::format_to(std::back_inserter(out_), "{}", value + 0.0);
    else
      append_rounded(out_, value, digits);
    return *this;
  }
  JsonText& number(const std::optional<double>& value, int digits = 0) {
    return number(value.value_or(NAN), digits);
  }
  JsonText& count(std::int64_t value) {
    comma();
    fmt::format_to(std::back_inserter(out_), "{}", value);
    return *this;
  }
  JsonText& flag(bool value) { return count(value ? 1 : 0); }
  std::string take() { return std::move(out_); }

 private:
  void comma() {
    if (!first_) out_ += ',';
    first_ = false;
  }
  std::string out_;
  bool first_ = true;
};

// Text for an HTML element or a quoted attribute.
std::string html_text(std::string_view text);

// The template with every {{name}} replaced by the text of that name, in one pass: what is put in
// is not looked at again. A name that is not given stands for nothing.
std::string fill_template(std::string_view page,
                          const std::vector<std::pair<std::string_view, std::string_view>>& values);

// 'sha256-...' as a content security policy names a script or style by its bytes.
std::string policy_hash(std::string_view text);

}  // namespace duskgrid::publish

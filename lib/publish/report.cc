#include "publish/report.h"

#include <algorithm>
#include <array>
#include <cctype>
#include <cmath>
#include <tuple>

#include "publish/report/files.h"
#include "publish/report_text.h"
#include "publish/text.h"

namespace duskgrid::publish {
namespace {

constexpr std::array<std::string_view, 4> kScopes{"automatic", "all", "flagged", "none"};

// Scripts of a page see nothing of one another but `duskgrid`.
std::string closed(std::initializer_list<std::string_view> parts) {
  std::string out = "(function () {\n\"use strict\";\n";
  for (const auto part : parts) (out += part) += '\n';
  return out + "})();\n";
}

// The reasons of the ledger for the scripts: [word, state, meaning] in the order of the
// enumeration.
std::string reasons_script() {
  JsonText json;
  json.open('[');
  for (const auto& entry : quotes::reasons())
    json.open('[').text(entry.word).text(quotes::word(entry.state)).text(entry.meaning).close(']');
  json.close(']');
  return "const REASONS = " + json.take() + ";\n";
}

bool is_index(std::string_view name) {
  constexpr std::string_view kIndex = "index";
  return std::equal(name.begin(), name.end(), kIndex.begin(), kIndex.end(), [](char a, char b) {
    return std::tolower(static_cast<unsigned char>(a)) == b;
  });
}

void write_counts(JsonText& json, const quotes::LedgerCounts& rows) {
  json.open('[');
  for (std::size_t i = 0; i < quotes::kReasonCount; ++i)
    if (rows.by_reason[i] > 0) json.count(static_cast<std::int64_t>(i)).count(rows.by_reason[i]);
  json.close(']');
}

// Where its page is: 0 for none, 1 for the name and ".html", else the file.
void write_page(JsonText& json, const ReportLine& line) {
  const auto file = report_file_name(line.record->name);
  if (!line.has_page)
    json.count(0);
  else if (file == line.record->name + ".html")
    json.count(1);
  else
    json.text(file);
}

void write_line(JsonText& json, const ReportLine& line) {
  const auto& u = *line.record;
  json.open('[').text(u.name).count(static_cast<int>(u.status)).flag(u.certified);
  json.count(u.slices).count(u.used).count(u.inside).count(u.violations);
  json.number(line.worst_miss, 3).count(line.carried_expiries).count(line.flagged_changes);
  json.number(line.largest_move, 7).text(u.message).text(u.carried_from);
  write_counts(json, line.rows);
  write_page(json, line);
  json.close(']');
}

void write_inputs(JsonText& json, const RunRecord& run) {
  json.key("inputs").open('[');
  for (const auto& input : run.inputs)
    json.open('[')
        .text(input.file)
        .count(input.rows)
        .count(input.bytes)
        .text(input.sha256)
        .close(']');
  json.close(']');
}

std::string index_data(const RunRecord& run, std::span<const ReportLine> lines,
                       std::span<const std::string> remarks) {
  JsonText json;
  json.open('{').key("version").text(run.version);
  json.key("as_of").text(quotes::format_instant(run.as_of.clock, run.as_of.instant));
  json.key("zone").text(run.as_of.clock.zone);
  json.key("remarks").open('[');
  for (const auto& remark : remarks) json.text(remark);
  json.close(']');
  write_inputs(json, run);
  json.key("rows");
  write_counts(json, run.rows);
  json.key("underlyings").open('[');
  for (const auto& line : lines) write_line(json, line);
  json.close(']').close('}');
  return json.take();
}

double share(std::int64_t part, std::int64_t whole) {
  return whole > 0 ? static_cast<double>(part) / static_cast<double>(whole) : 0;
}

auto concern(const ReportLine& line) {
  const auto& u = *line.record;
  return std::tuple(u.status, u.violations + line.flagged_changes, u.used - u.inside,
                    share(line.rows.dropped, line.rows.read));
}

}  // namespace

std::string_view word(ReportScope scope) { return kScopes[static_cast<std::size_t>(scope)]; }

std::optional<ReportScope> parse_report_scope(std::string_view text) {
  const auto found = std::find(kScopes.begin(), kScopes.end(), text);
  if (found == kScopes.end()) return std::nullopt;
  return static_cast<ReportScope>(found - kScopes.begin());
}

std::string report_file_name(std::string_view underlying) {
  return (is_index(underlying) ? "%" : "") + encode_file_name(underlying) + ".html";
}

bool more_concern(const ReportLine& a, const ReportLine& b) {
  const auto left = concern(a), right = concern(b);
  return left == right ? a.record->name < b.record->name : left > right;
}

std::string report_index(const RunRecord& run, std::span<const ReportLine> lines,
                         std::span<const std::string> remarks) {
  const std::string script = closed({reasons_script(), files::common, files::index_script});
  const std::string policy = "default-src 'none'; script-src " + policy_hash(script) +
                             "; style-src " + policy_hash(files::style) +
                             "; base-uri 'none'; form-action 'none'";
  const auto date = quotes::format_date(run.as_of.clock, run.as_of.instant);
  return fill_template(files::index_page, {{"policy", policy},
                                           {"title", "Night of " + date},
                                           {"style", files::style},
                                           {"data", index_data(run, lines, remarks)},
                                           {"script", script}});
}

std::string report_script() {
  std::string out = "/*\n";
  (out += files::d3_licence) += "*/\n";
  (out += files::d3) += '\n';
  return out + closed({reasons_script(), files::common, files::frame, files::smile, files::surface,
                       files::forward, files::ledger, files::changes, files::page_script});
}

std::string report_style() { return std::string(files::style); }

}  // namespace duskgrid::publish

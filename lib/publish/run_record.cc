#include "publish/run_record.h"

#include <array>
#include <nlohmann/json.hpp>

namespace duskgrid::publish {
namespace {

using nlohmann::ordered_json;

// Inputs are checked to be UTF-8; file names given by a shell need not be.
std::string text_of(const ordered_json& json) {
  return json.dump(1, ' ', false, ordered_json::error_handler_t::replace) + "\n";
}

ordered_json underlying_to_json(const UnderlyingRecord& u) {
  ordered_json out;
  out["status"] = word(u.status);
  out["certified"] = u.certified;
  out["slices"] = u.slices;
  out["used"] = u.used;
  out["inside"] = u.inside;
  out["violations"] = u.violations;
  out["carried_from"] =
      u.carried_from.empty() ? ordered_json(nullptr) : ordered_json(u.carried_from);
  out["message"] = u.message;
  return out;
}

}  // namespace

std::string_view word(Status status) {
  constexpr std::array<std::string_view, 4> kWords{"published", "flagged", "carried", "refused"};
  return kWords[static_cast<std::size_t>(status)];
}

std::string run_to_json(const RunRecord& run) {
  ordered_json out;
  out["tool"] = "duskgrid";
  out["version"] = run.version;
  out["as_of"] = quotes::format_instant(run.as_of.clock, run.as_of.instant);
  out["configuration"] = ordered_json::parse(run.configuration);
  out["inputs"] = ordered_json::array();
  for (const auto& i : run.inputs)
    out["inputs"].push_back(ordered_json::object(
        {{"file", i.file}, {"sha256", i.sha256}, {"bytes", i.bytes}, {"rows", i.rows}}));
  out["outputs"] = ordered_json::array();
  for (const auto& [file, sha256] : run.outputs)
    out["outputs"].push_back(ordered_json::object({{"file", file}, {"sha256", sha256}}));
  out["rows"] = ordered_json::object({{"read", run.rows.read},
                                      {"used", run.rows.used},
                                      {"spare", run.rows.spare},
                                      {"dropped", run.rows.dropped}});
  out["reasons"] = ordered_json::object();
  for (const auto& entry : quotes::reasons())
    if (const auto count = run.rows.by_reason[static_cast<std::size_t>(entry.reason)];
        count > 0 && !entry.word.empty())
      out["reasons"][std::string(entry.word)] = count;
  out["underlyings"] = ordered_json::object();
  for (const auto& u : run.underlyings) out["underlyings"][u.name] = underlying_to_json(u);
  return text_of(out);
}

std::string timings_to_json(const Timings& timings) {
  ordered_json out;
  out["stages"] = ordered_json::array();
  for (const auto& s : timings.stages)
    out["stages"].push_back(ordered_json::object(
        {{"stage", s.stage}, {"wall_seconds", s.wall_seconds}, {"cpu_seconds", s.cpu_seconds}}));
  out["threads"] = timings.threads;
  out["peak_memory_bytes"] = timings.peak_memory_bytes;
  return text_of(out);
}

}  // namespace duskgrid::publish

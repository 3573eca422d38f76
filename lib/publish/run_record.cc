#include "publish/run_record.h"

#include <fmt/format.h>

#include <algorithm>
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

// What no account says; the library's own exceptions say the rest.
struct Refusal {
  std::string why;
};

constexpr std::array<std::string_view, 4> kStatusWords{"published", "flagged", "carried",
                                                       "refused"};

Status status_of(const std::string& text) {
  for (std::size_t i = 0; i < kStatusWords.size(); ++i)
    if (kStatusWords[i] == text) return static_cast<Status>(i);
  throw Refusal{"has the unknown status " + text};
}

// The library would make a number of true, and cut off what is not whole.
std::int64_t count_of(const ordered_json& in, const char* key) {
  const auto& value = in.at(key);
  if (!value.is_number_integer()) throw Refusal{std::string(key) + " is not a whole number"};
  return value.get<std::int64_t>();
}

std::string text_at(const ordered_json& in, const char* key) {
  return in.at(key).get<std::string>();
}

UnderlyingRecord underlying_from_json(const std::string& name, const ordered_json& in) {
  UnderlyingRecord u;
  u.name = name;
  u.status = status_of(text_at(in, "status"));
  u.certified = in.at("certified").get<bool>();
  u.slices = count_of(in, "slices");
  u.used = count_of(in, "used");
  u.inside = count_of(in, "inside");
  u.violations = count_of(in, "violations");
  if (!in.at("carried_from").is_null()) u.carried_from = text_at(in, "carried_from");
  u.message = text_at(in, "message");
  return u;
}

quotes::LedgerCounts counts_from_json(const ordered_json& in) {
  quotes::LedgerCounts counts;
  const auto& rows = in.at("rows");
  counts.read = count_of(rows, "read");
  counts.used = count_of(rows, "used");
  counts.spare = count_of(rows, "spare");
  counts.dropped = count_of(rows, "dropped");
  counts.by_reason[0] = counts.used;
  for (const auto& [reason, value] : in.at("reasons").items()) {
    const auto entries = quotes::reasons();
    const auto known = std::find_if(entries.begin(), entries.end(),
                                    [&](const auto& e) { return e.word == reason; });
    if (reason.empty() || known == entries.end()) throw Refusal{"has the unknown reason " + reason};
    counts.by_reason[static_cast<std::size_t>(known->reason)] =
        count_of(in.at("reasons"), reason.c_str());
  }
  return counts;
}

quotes::AsOf as_of_from_json(const ordered_json& in) {
  const auto& zone = in.at("configuration").value("zone", ordered_json(nullptr));
  const auto as_of =
      quotes::parse_as_of(text_at(in, "as_of"), zone.is_string() ? zone.get<std::string>() : "");
  if (!as_of) throw Refusal{"as_of is not an instant"};
  return *as_of;
}

RunRecord record_from_json(const ordered_json& in) {
  if (!in.is_object() || in.value("tool", ordered_json(nullptr)) != "duskgrid")
    throw Refusal{"is not an account of a run of duskgrid"};
  RunRecord run;
  run.version = text_at(in, "version");
  run.as_of = as_of_from_json(in);
  run.configuration = in.at("configuration").dump();
  for (const auto& i : in.at("inputs"))
    run.inputs.push_back(
        {text_at(i, "file"), text_at(i, "sha256"), count_of(i, "bytes"), count_of(i, "rows")});
  if (const auto& previous = in.at("previous"); !previous.is_null())
    run.previous = PreviousRecord{text_at(previous, "folder"), text_at(previous, "as_of"),
                                  text_at(previous, "sha256")};
  for (const auto& o : in.at("outputs")) run.outputs[text_at(o, "file")] = text_at(o, "sha256");
  run.rows = counts_from_json(in);
  for (const auto& [name, u] : in.at("underlyings").items())
    run.underlyings.push_back(underlying_from_json(name, u));
  return run;
}

}  // namespace

std::string_view word(Status status) { return kStatusWords[static_cast<std::size_t>(status)]; }

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
  out["previous"] = nullptr;
  if (run.previous)
    out["previous"] = ordered_json::object({{"folder", run.previous->folder},
                                            {"as_of", run.previous->as_of},
                                            {"sha256", run.previous->sha256}});
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

Result<RunRecord> run_from_json(std::string_view text, const std::string& where) {
  const auto refuse = [&](const std::string& why) {
    return Failure{Fault::not_quotes, where, why};
  };
  try {
    return record_from_json(ordered_json::parse(text));
  } catch (const nlohmann::json::parse_error& error) {
    return refuse(fmt::format("is not JSON (at byte {})", error.byte));
  } catch (const nlohmann::json::exception& error) {
    return refuse(fmt::format("lacks a key or has one of another type ({})", error.what()));
  } catch (const Refusal& refusal) {
    return refuse(refusal.why);
  }
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

#include "night/changes.h"

#include <fmt/format.h>
#include <tbb/parallel_for.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <utility>

namespace duskgrid::night {
namespace {

using publish::ComparedSide;
using publish::PastUnderlying;
using publish::StoredSurface;
using publish::TermNights;
using publish::UnderlyingChange;

// One name of either night.
struct Pairing {
  MarkedUnderlying* now = nullptr;
  const PastUnderlying* before = nullptr;
};

std::map<std::string, Pairing> pairings(std::vector<MarkedUnderlying>& marked,
                                        const publish::PastRun& previous) {
  std::map<std::string, Pairing> pairs;
  for (auto& m : marked) pairs[m.record.name].now = &m;
  for (const auto& [name, past] : previous.underlyings) pairs[name].before = &past;
  return pairs;
}

ComparedSide side_of(const PastUnderlying* past) {
  ComparedSide side{};
  if (!past) return side;
  side.stored = past->stored ? &*past->stored : nullptr;
  side.carried = past->record.status == publish::Status::carried;
  side.in_files = !past->prints.empty();
  side.prints = past->prints;
  return side;
}

const TermNights& past_of(const std::map<std::string, TermNights>& past, const std::string& name) {
  static const TermNights none;
  const auto found = past.find(name);
  return found == past.end() ? none : found->second;
}

UnderlyingChange change_of(const std::string& name, const Pairing& pair,
                           const ComparedNights& nights, const NightConfig& config,
                           const ResolvedNight& night) {
  StoredSurface stored{night.as_of, {}};
  ComparedSide now{};
  now.in_files = pair.now && !pair.now->expiries.empty();
  if (pair.now) {
    now.carried = pair.now->record.status == publish::Status::carried;
    for (const auto& row : pair.now->expiries) now.prints.push_back({row.expiry, row.print});
    if (pair.now->surface) {
      stored.surface = *pair.now->surface;
      now.stored = &stored;
    }
  }
  static const std::vector<publish::GridNode> none;
  return publish::compare_underlying(name, side_of(pair.before), now,
                                     pair.now ? pair.now->grid : none, past_of(nights.past, name),
                                     config.compare);
}

void flag(publish::UnderlyingRecord& record, const std::string& what) {
  record.message += (record.message.empty() ? "" : "; ") + what;
  if (record.status == publish::Status::published) record.status = publish::Status::flagged;
}

void flag_changes(publish::UnderlyingRecord& record, const UnderlyingChange& change,
                  const quotes::AsOf& before, const quotes::Clock& clock) {
  if (change.state == publish::ChangeState::stale)
    flag(record, "quotes are those of " + quotes::format_instant(before.clock, before.instant));
  if (!change.vanished_expiries.empty()) {
    const std::size_t more = change.vanished_expiries.size() - 1;
    flag(record, fmt::format("expiry {} has vanished{}",
                             quotes::format_instant(clock, change.vanished_expiries.front()),
                             more == 0 ? "" : fmt::format(", and {} more", more)));
  }
  const auto count = change.to_sign_off();
  if (count == 0) return;
  const auto& most = *change.largest();
  flag(record, fmt::format("{} of {} nodes to sign off: up to {:+.4f} of vol, at {}, strike {:.6g}",
                           count, change.nodes.size(), most.move,
                           quotes::format_instant(clock, most.node.expiry), most.node.strike));
}

}  // namespace

std::map<std::string, TermNights> past_terms(const std::string& out, const std::string& before_date,
                                             const publish::CompareOptions& options,
                                             std::vector<std::string>& remarks) {
  const std::string path = out + "/" + publish::History::kFileName;
  std::error_code error;
  if (options.times_typical == 0 || !std::filesystem::exists(path, error)) return {};
  auto history = publish::History::open(path, publish::History::Access::read);
  if (history) {
    auto terms = (*history)->terms(before_date, options.most_nights);
    if (terms) return std::move(*terms);
    remarks.push_back("changes are not compared with earlier ones: " + terms.failure().text());
  } else {
    remarks.push_back("changes are not compared with earlier ones: " + history.failure().text());
  }
  return {};
}

Result<bool> write_changes(publish::RunFolder& folder, std::vector<MarkedUnderlying>& marked,
                           const ComparedNights& nights, const NightConfig& config,
                           const ResolvedNight& night, const SeenChange& seen) {
  // So many at a time: all lines of a large night would not fit in memory.
  constexpr std::size_t kAtOnce = 256;
  const auto& clock = night.as_of.clock;
  return folder.add("changes.csv", [&](publish::RunFile& file) {
    file.write(publish::kChangesHeader);
    if (!nights.previous) return;
    const auto pairs = pairings(marked, *nights.previous);
    std::vector<std::pair<std::string, Pairing>> all(pairs.begin(), pairs.end());
    for (std::size_t begin = 0; begin < all.size(); begin += kAtOnce) {
      const std::size_t end = std::min(begin + kAtOnce, all.size());
      std::vector<std::string> lines(end - begin);
      tbb::parallel_for(begin, end, [&](std::size_t i) {
        auto& [name, pair] = all[i];
        const auto change = change_of(name, pair, nights, config, night);
        lines[i - begin] = publish::changes_lines(change, config.grid.axis, clock);
        if (pair.now) flag_changes(pair.now->record, change, nights.previous->as_of, clock);
        if (pair.now && seen) seen(*pair.now, change);
      });
      for (const auto& text : lines) file.write(text);
    }
  });
}

std::vector<publish::GridNode> nodes_of(const StoredSurface& stored,
                                        const publish::GridOptions& options) {
  publish::GridInputs inputs{stored.as_of.instant, stored.as_of.clock, {}, {}, false};
  inputs.used_k.resize(stored.surface.slices.size());
  return publish::sample_grid(stored.surface, inputs, options);
}

std::vector<UnderlyingChange> compare_runs(const publish::PastRun& before,
                                           const publish::PastRun& now,
                                           const std::map<std::string, TermNights>& past,
                                           const publish::CompareOptions& options) {
  std::map<std::string, std::pair<const PastUnderlying*, const PastUnderlying*>> names;
  for (const auto& [name, u] : before.underlyings) names[name].first = &u;
  for (const auto& [name, u] : now.underlyings) names[name].second = &u;
  std::vector<UnderlyingChange> changes(names.size());
  std::vector<decltype(names)::const_iterator> order;
  for (auto at = names.cbegin(); at != names.cend(); ++at) order.push_back(at);
  tbb::parallel_for(std::size_t{0}, order.size(), [&](std::size_t i) {
    const auto& [name, pair] = *order[i];
    std::vector<publish::GridNode> nodes;
    if (pair.second && pair.second->stored) nodes = nodes_of(*pair.second->stored, now.grid);
    ComparedSide side = side_of(pair.second);
    if (!pair.second) side.in_files = false;
    changes[i] = publish::compare_underlying(name, side_of(pair.first), side, nodes,
                                             past_of(past, name), options);
  });
  return changes;
}

Result<bool> write_history(const std::string& out, const std::vector<MarkedUnderlying>& marked,
                           const NightConfig& config, const ResolvedNight& night,
                           const std::string& version) {
  publish::HistoryNight record{quotes::format_date(night.as_of.clock, night.as_of.instant),
                               night.as_of, version,
                               std::vector<publish::HistoryUnderlying>(marked.size())};
  tbb::parallel_for(std::size_t{0}, marked.size(), [&](std::size_t i) {
    const auto& m = marked[i];
    auto& u = record.underlyings[i];
    u.record = m.record;
    if (!m.surface) return;
    u.term_slope = publish::term_slope(*m.surface);
    for (const auto& slice : m.surface->slices) {
      auto s = publish::history_slice(slice);
      if (!std::isfinite(s.vol)) continue;  // an overlay of no proved surface takes w below 0
      const auto quality = std::find_if(m.quality.begin(), m.quality.end(),
                                        [&](const auto& q) { return q.expiry == s.expiry; });
      if (quality != m.quality.end()) {
        s.used = quality->used;
        s.inside = quality->inside;
        s.rms_vol = quality->rms_vol;
      }
      u.slices.push_back(s);
    }
    if (config.history.surfaces)
      u.surface = publish::packed_surface(publish::surface_to_json({night.as_of, *m.surface}));
  });
  auto history = publish::History::open(out + "/" + publish::History::kFileName,
                                        publish::History::Access::write);
  if (!history) return history.failure();
  return (*history)->write_night(record);
}

}  // namespace duskgrid::night

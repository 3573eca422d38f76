#include "publish/history.h"

#include <fmt/format.h>
#include <sqlite3.h>
#include <unistd.h>

#include <array>
#include <boost/iostreams/device/array.hpp>
#include <boost/iostreams/device/back_inserter.hpp>
#include <boost/iostreams/filter/zstd.hpp>
#include <boost/iostreams/filtering_stream.hpp>
#include <cmath>
#include <filesystem>
#include <string_view>
#include <unordered_map>
#include <unordered_set>
#include <utility>

namespace duskgrid::publish {
namespace {

// "DSKG": tells a history from other databases.
constexpr int kApplication = 0x44534B47;

// What brings a database from each schema to the next; docs/history.md describes the last one.
constexpr std::array<const char*, History::kSchema> kSteps{
    // 1: nights, underlyings and expiries.
    R"(
CREATE TABLE nights (id INTEGER PRIMARY KEY, date TEXT NOT NULL UNIQUE, as_of TEXT NOT NULL,
  as_of_seconds INTEGER NOT NULL, zone TEXT NOT NULL, offset_minutes INTEGER NOT NULL,
  version TEXT NOT NULL) STRICT;
CREATE TABLE names (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE) STRICT;
CREATE TABLE underlyings (night INTEGER NOT NULL REFERENCES nights, name INTEGER NOT NULL
  REFERENCES names, status TEXT NOT NULL, message TEXT NOT NULL, carried_from TEXT,
  certified INTEGER NOT NULL, used INTEGER NOT NULL, inside INTEGER NOT NULL,
  violations INTEGER NOT NULL, term_slope REAL, PRIMARY KEY (night, name)) STRICT, WITHOUT ROWID;
CREATE TABLE slices (night INTEGER NOT NULL REFERENCES nights, name INTEGER NOT NULL
  REFERENCES names, expiry INTEGER NOT NULL, year_fraction REAL NOT NULL, forward REAL NOT NULL,
  discount_factor REAL NOT NULL, vol REAL NOT NULL, skew REAL, curvature REAL,
  used INTEGER NOT NULL, inside INTEGER NOT NULL, rms_vol REAL,
  PRIMARY KEY (night, name, expiry)) STRICT, WITHOUT ROWID;
)",
    // 2: whole surfaces, and a way from a name to its nights.
    R"(
CREATE TABLE surfaces (night INTEGER NOT NULL REFERENCES nights, name INTEGER NOT NULL
  REFERENCES names, surface BLOB NOT NULL, PRIMARY KEY (night, name)) STRICT;
CREATE INDEX nights_of_name ON underlyings (name, night);
)"};

// What stopped the work, in words for a person.
struct Trouble {
  std::string what;
};

std::string words_for(sqlite3* handle, int code) {
  switch (code & 0xFF) {
    case SQLITE_BUSY:
    case SQLITE_LOCKED: return "is locked by another program; try again when it is done";
    case SQLITE_NOTADB:
    case SQLITE_CORRUPT:
      return "is damaged or no SQLite database; move it away, and the next run begins a new one";
    default: return std::string("cannot be used: ") + (handle ? sqlite3_errmsg(handle) : "memory");
  }
}

// A prepared statement. Parameters are bound in order; errors are thrown as Trouble.
class Statement {
 public:
  Statement(sqlite3* handle, std::string_view sql) : handle_(handle) {
    check(sqlite3_prepare_v2(handle, sql.data(), static_cast<int>(sql.size()), &held_, nullptr));
  }
  ~Statement() { sqlite3_finalize(held_); }
  Statement(const Statement&) = delete;
  Statement& operator=(const Statement&) = delete;

  Statement& bind(std::int64_t value) {
    check(sqlite3_bind_int64(held_, ++bound_, value));
    return *this;
  }
  // What is not finite is no value.
  Statement& bind(double value) {
    ++bound_;
    check(std::isfinite(value) ? sqlite3_bind_double(held_, bound_, value)
                               : sqlite3_bind_null(held_, bound_));
    return *this;
  }
  // The text must live until run() or the last step().
  Statement& bind(std::string_view value) {
    const char* text = value.data() ? value.data() : "";
    check(sqlite3_bind_text64(held_, ++bound_, text, value.size(), SQLITE_STATIC, SQLITE_UTF8));
    return *this;
  }
  Statement& bind_bytes(const std::string& value) {
    check(sqlite3_bind_blob64(held_, ++bound_, value.data(), value.size(), SQLITE_STATIC));
    return *this;
  }
  Statement& bind_or_null(const std::string& value) {
    if (!value.empty()) return bind(std::string_view(value));
    check(sqlite3_bind_null(held_, ++bound_));
    return *this;
  }

  // True while there is a row.
  bool step() {
    const int code = sqlite3_step(held_);
    if (code != SQLITE_ROW && code != SQLITE_DONE) check(code);
    return code == SQLITE_ROW;
  }
  // To its end, and ready to be bound again.
  void run() {
    while (step()) {
    }
    rewind();
  }
  void rewind() {
    sqlite3_reset(held_);
    bound_ = 0;
  }

  std::int64_t integer(int column) { return sqlite3_column_int64(held_, column); }
  double number(int column) {
    return sqlite3_column_type(held_, column) == SQLITE_NULL ? quotes::kAbsent
                                                             : sqlite3_column_double(held_, column);
  }
  // The bytes of a text, or of a blob.
  std::string text(int column) {
    const auto* bytes = static_cast<const char*>(sqlite3_column_blob(held_, column));
    const auto size = static_cast<std::size_t>(sqlite3_column_bytes(held_, column));
    return bytes ? std::string(bytes, size) : std::string();
  }

 private:
  void check(int code) const {
    if (code != SQLITE_OK) throw Trouble{words_for(handle_, code)};
  }
  sqlite3* handle_;
  sqlite3_stmt* held_ = nullptr;
  int bound_ = 0;
};

void execute(sqlite3* handle, const char* sql) {
  const int code = sqlite3_exec(handle, sql, nullptr, nullptr, nullptr);
  if (code != SQLITE_OK) throw Trouble{words_for(handle, code)};
}

std::int64_t ask(sqlite3* handle, const char* sql) {
  Statement statement(handle, sql);
  return statement.step() ? statement.integer(0) : 0;
}

// Rolled back unless committed.
class Transaction {
 public:
  explicit Transaction(sqlite3* handle) : handle_(handle) { execute(handle_, "BEGIN IMMEDIATE"); }
  ~Transaction() {
    if (!done_) sqlite3_exec(handle_, "ROLLBACK", nullptr, nullptr, nullptr);
  }
  Transaction(const Transaction&) = delete;
  Transaction& operator=(const Transaction&) = delete;
  void commit() {
    execute(handle_, "COMMIT");
    done_ = true;
  }

 private:
  sqlite3* handle_;
  bool done_ = false;
};

// The schema of a history; 0 of an empty database. Anything else is thrown.
int schema_of(sqlite3* handle) {
  const auto version = ask(handle, "PRAGMA user_version");
  const auto application = ask(handle, "PRAGMA application_id");
  const auto tables = ask(handle, "SELECT count(*) FROM sqlite_schema");
  if (tables == 0 && version == 0) return 0;
  if (application != kApplication || version < 1) throw Trouble{"is not a history of this program"};
  if (version > History::kSchema)
    throw Trouble{
        fmt::format("is of schema {}, and this version knows {} and before: use a later version",
                    version, History::kSchema)};
  return static_cast<int>(version);
}

void migrate(sqlite3* handle) {
  if (schema_of(handle) == History::kSchema) return;
  Transaction transaction(handle);
  for (int from = schema_of(handle); from < History::kSchema; ++from)
    execute(handle, kSteps[static_cast<std::size_t>(from)]);
  execute(handle, fmt::format("PRAGMA application_id = {}; PRAGMA user_version = {}", kApplication,
                              History::kSchema)
                      .c_str());
  transaction.commit();
}

// Not more than any surface takes: a file may have been made to unpack without end.
std::string unpacked(const std::string& bytes) {
  namespace io = boost::iostreams;
  constexpr std::size_t kMost = std::size_t{64} << 20;
  constexpr std::size_t kBlock = std::size_t{1} << 16;
  io::filtering_istream stream;
  stream.push(io::zstd_decompressor());
  stream.push(io::array_source(bytes.data(), bytes.size()));
  stream.exceptions(std::ios::badbit);
  std::string out, block(kBlock, '\0');
  while (stream.read(block.data(), static_cast<std::streamsize>(kBlock)), stream.gcount() > 0) {
    out.append(block.data(), static_cast<std::size_t>(stream.gcount()));
    if (out.size() > kMost) throw Trouble{"holds a surface that is too large to be one"};
  }
  return out;
}

quotes::AsOf as_of_from(Statement& row, int first) {
  // What a calendar of four digits can hold; a file may have been tampered with.
  constexpr std::int64_t kMostSeconds = 253'402'300'799;
  constexpr std::int64_t kMostMinutes = std::int64_t{24} * 60;
  const auto seconds = row.integer(first), minutes = row.integer(first + 2);
  quotes::Clock clock{row.text(first + 1), std::chrono::minutes{minutes}};
  if (seconds < 0 || seconds > kMostSeconds || std::abs(minutes) > kMostMinutes || clock.problem())
    throw Trouble{"holds a night at no known instant"};
  return {quotes::Instant{std::chrono::seconds{seconds}}, std::move(clock)};
}

HistorySlice slice_from(Statement& row) {
  constexpr std::int64_t kMostSeconds = 253'402'300'799;
  const auto seconds = row.integer(0);
  if (seconds < 0 || seconds > kMostSeconds) throw Trouble{"holds an expiry at no known instant"};
  return {quotes::Instant{std::chrono::seconds{seconds}},
          row.number(1),
          row.number(2),
          row.number(3),
          row.number(4),
          row.number(5),
          row.number(6),
          row.integer(7),
          row.integer(8),
          row.number(9)};
}

Status status_from(const std::string& text) {
  for (const auto status : {Status::published, Status::flagged, Status::carried})
    if (word(status) == text) return status;
  return Status::refused;
}

// Total variance at the forward and its first derivatives in k, from volatility, skew, curvature.
struct Variance {
  double w, slope, bend;
  explicit Variance(const HistorySlice& s)
      : w(s.vol * s.vol * s.year_fraction),
        slope(2 * s.vol * s.skew * s.year_fraction),
        bend(2 * (s.skew * s.skew + s.vol * s.curvature) * s.year_fraction) {}
  Variance(double a, double b, double c) : w(a), slope(b), bend(c) {}
};

void put(HistorySlice& slice, const Variance& v) {
  const double t = slice.year_fraction;
  slice.vol = std::sqrt(v.w / t);
  slice.skew = 0.5 * v.slope / (slice.vol * t);
  slice.curvature = (0.5 * v.bend / t - slice.skew * slice.skew) / slice.vol;
}

Variance variance_at(const std::vector<HistorySlice>& slices, double t) {
  std::size_t next = 0;
  while (next < slices.size() && slices[next].year_fraction < t) ++next;
  if (next == slices.size()) {
    Variance v(slices.back());
    v.w *= t / slices.back().year_fraction;
    return v;
  }
  const Variance late(slices[next]);
  if (next == 0) {
    const double part = t / slices[0].year_fraction;
    return {part * late.w, part * late.slope, part * late.bend};
  }
  const Variance early(slices[next - 1]);
  const double from = slices[next - 1].year_fraction;
  const double part = (t - from) / (slices[next].year_fraction - from);
  return {std::lerp(early.w, late.w, part), std::lerp(early.slope, late.slope, part),
          std::lerp(early.bend, late.bend, part)};
}

}  // namespace

std::string packed_surface(const std::string& json) {
  namespace io = boost::iostreams;
  std::string out;
  io::filtering_ostream stream;
  stream.push(io::zstd_compressor(io::zstd_params(io::zstd::best_speed)));
  stream.push(io::back_inserter(out));
  stream.write(json.data(), static_cast<std::streamsize>(json.size()));
  stream.reset();
  return out;
}

HistorySlice history_slice(const surface::Slice& s) {
  const auto point = surface::smile_of(s, 0);
  HistorySlice out{s.expiry, s.year_fraction, s.forward, s.discount_factor, 0, 0, 0};
  put(out, {point.w, point.dw_dk, point.d2w_dk2});
  return out;
}

double term_slope(const surface::Surface& surface) {
  constexpr double kNear = 0.25, kFar = 1;
  return (surface::vol_at(surface, 0, kFar) - surface::vol_at(surface, 0, kNear)) / (kFar - kNear);
}

std::optional<HistorySlice> at_maturity(const std::vector<HistorySlice>& slices,
                                        quotes::Instant expiry, double t) {
  if (slices.empty() || !(t > 0)) return std::nullopt;
  HistorySlice out{expiry, t, 0, 0, 0, 0, 0};
  put(out, variance_at(slices, t));
  surface::Surface curves;
  for (const auto& s : slices)
    curves.slices.push_back({s.expiry, s.year_fraction, s.forward, s.discount_factor, {}, 0, 0});
  const auto carried = surface::carried_at(curves, t);
  out.forward = carried.forward;
  out.discount_factor = carried.discount_factor;
  return out;
}

struct History::Database {
  sqlite3* handle = nullptr;
  std::string path;
  Fault fault = Fault::no_input;
  ~Database() { sqlite3_close(handle); }

  // Calls `work`, and makes a failure of what stops it.
  template <class Work>
  auto attempt(Work work) -> Result<decltype(work())> {
    try {
      return work();
    } catch (const Trouble& trouble) {
      return Failure{fault, path, trouble.what};
    } catch (const std::exception& caught) {
      return Failure{fault, path, caught.what()};
    }
  }

  std::int64_t name_id(const std::string& name) {
    Statement find(handle, "SELECT id FROM names WHERE name = ?");
    find.bind(std::string_view(name));
    return find.step() ? find.integer(0) : 0;
  }
  // Underlyings of a night that were marked from its quotes.
  std::unordered_set<std::int64_t> marked_names(std::int64_t night) {
    Statement find(handle,
                   "SELECT name FROM underlyings WHERE night = ? "
                   "AND status IN ('published', 'flagged')");
    find.bind(night);
    std::unordered_set<std::int64_t> names;
    while (find.step()) names.insert(find.integer(0));
    return names;
  }
};

namespace {

std::string folder_of(const std::string& path) {
  const auto folder = std::filesystem::path(path).parent_path().string();
  return folder.empty() ? "." : folder;
}

// As the address of a file that nobody changes (SQLite, "URI Filenames").
std::string as_unchanging(const std::string& path) {
  std::error_code error;
  std::string out = "file:";
  for (const unsigned char c : std::filesystem::absolute(path, error).string())
    out += std::isalnum(c) || c == '/' || c == '.' || c == '_' || c == '-'
               ? std::string(1, static_cast<char>(c))
               : fmt::format("%{:02X}", c);
  return out + "?immutable=1";
}

}  // namespace

History::History(std::unique_ptr<Database> database) : database_(std::move(database)) {}
History::~History() = default;

Result<std::unique_ptr<History>> History::open(const std::string& path, Access access,
                                               std::chrono::milliseconds wait) {
  auto database = std::make_unique<Database>();
  database->path = path;
  database->fault = access == Access::read ? Fault::no_input : Fault::cannot_create;
  std::error_code error;
  if (access == Access::read && !std::filesystem::is_regular_file(path, error))
    return Failure{Fault::no_input, path, "there is no history: it begins with the first build"};
  const int flags =
      access == Access::read ? SQLITE_OPEN_READONLY : SQLITE_OPEN_READWRITE | SQLITE_OPEN_CREATE;
  // Who may not write beside the file cannot join its journal: a reader then takes the file as it
  // stands. The last writer to close it leaves no journal.
  const bool alone = access == Access::read && ::access(folder_of(path).c_str(), W_OK) != 0;
  const std::string name = alone ? as_unchanging(path) : path;
  const int code = sqlite3_open_v2(name.c_str(), &database->handle,
                                   flags | (alone ? SQLITE_OPEN_URI : 0), nullptr);
  if (code != SQLITE_OK) return Failure{database->fault, path, words_for(database->handle, code)};
  sqlite3* handle = database->handle;
  sqlite3_extended_result_codes(handle, 1);
  sqlite3_busy_timeout(handle, static_cast<int>(wait.count()));
  // A file from outside must not make the program run what is in it.
  sqlite3_db_config(handle, SQLITE_DBCONFIG_TRUSTED_SCHEMA, 0, nullptr);
  sqlite3_db_config(handle, SQLITE_DBCONFIG_DEFENSIVE, 1, nullptr);
  auto schema = database->attempt([&] {
    const int found = schema_of(handle);
    if (access == Access::read && found == 0) throw Trouble{"is not a history of this program"};
    if (access == Access::write) {
      ask(handle, "PRAGMA journal_mode = WAL");
      execute(handle, "PRAGMA synchronous = NORMAL");
      migrate(handle);
    }
    return found;
  });
  if (!schema) return schema.failure();
  if (access == Access::read && *schema < kSchema) {
    database.reset();
    auto migrated = open(path, Access::write, wait);
    if (!migrated) return Failure{Fault::no_input, path, migrated.failure().detail};
    migrated->reset();
    return open(path, access, wait);
  }
  return std::unique_ptr<History>(new History(std::move(database)));
}

Result<bool> History::write_night(const HistoryNight& night) {
  auto& db = *database_;
  return db.attempt([&] {
    Transaction transaction(db.handle);
    Statement old(db.handle, "SELECT id FROM nights WHERE date = ?");
    if (old.bind(std::string_view(night.date)).step()) {
      const std::int64_t id = old.integer(0);
      for (const char* sql :
           {"DELETE FROM slices WHERE night = ?", "DELETE FROM surfaces WHERE night = ?",
            "DELETE FROM underlyings WHERE night = ?", "DELETE FROM nights WHERE id = ?"})
        Statement(db.handle, sql).bind(id).run();
    }
    const auto& as_of = night.as_of;
    const std::string instant = quotes::format_instant(as_of.clock, as_of.instant);
    Statement(db.handle,
              "INSERT INTO nights (date, as_of, as_of_seconds, zone, offset_minutes, version) "
              "VALUES (?, ?, ?, ?, ?, ?)")
        .bind(std::string_view(night.date))
        .bind(std::string_view(instant))
        .bind(std::int64_t{as_of.instant.time_since_epoch().count()})
        .bind(std::string_view(as_of.clock.zone))
        .bind(std::int64_t{as_of.clock.offset.count()})
        .bind(std::string_view(night.version))
        .run();
    const std::int64_t id = sqlite3_last_insert_rowid(db.handle);
    Statement name(db.handle, "INSERT OR IGNORE INTO names (name) VALUES (?)");
    Statement find_name(db.handle, "SELECT id FROM names WHERE name = ?");
    Statement underlying(db.handle,
                         "INSERT INTO underlyings (night, name, status, message, carried_from, "
                         "certified, used, inside, violations, term_slope) "
                         "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)");
    Statement slice(db.handle,
                    "INSERT INTO slices (night, name, expiry, year_fraction, forward, "
                    "discount_factor, vol, skew, curvature, used, inside, rms_vol) "
                    "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)");
    Statement surface(db.handle, "INSERT INTO surfaces (night, name, surface) VALUES (?, ?, ?)");
    for (const auto& u : night.underlyings) {
      const auto& r = u.record;
      name.bind(std::string_view(r.name)).run();
      find_name.bind(std::string_view(r.name)).step();
      const std::int64_t name_id = find_name.integer(0);
      find_name.rewind();
      underlying.bind(id).bind(name_id).bind(word(r.status)).bind(std::string_view(r.message));
      underlying.bind_or_null(r.carried_from).bind(std::int64_t{r.certified}).bind(r.used);
      underlying.bind(r.inside).bind(r.violations).bind(u.term_slope).run();
      for (const auto& s : u.slices) {
        slice.bind(id).bind(name_id).bind(std::int64_t{s.expiry.time_since_epoch().count()});
        slice.bind(s.year_fraction).bind(s.forward).bind(s.discount_factor).bind(s.vol);
        slice.bind(s.skew).bind(s.curvature).bind(s.used).bind(s.inside).bind(s.rms_vol).run();
      }
      if (!u.surface.empty()) surface.bind(id).bind(name_id).bind_bytes(u.surface).run();
    }
    transaction.commit();
    return true;
  });
}

Result<std::vector<HistoryNight>> History::series(const std::string& name, const std::string& from,
                                                  const std::string& to) {
  auto& db = *database_;
  return db.attempt([&] {
    std::vector<HistoryNight> nights;
    const std::int64_t name_id = db.name_id(name);
    Statement find(db.handle,
                   "SELECT n.id, n.date, n.as_of_seconds, n.zone, n.offset_minutes, n.version, "
                   "u.status, u.message, u.carried_from, u.certified, u.used, u.inside, "
                   "u.violations, u.term_slope FROM underlyings u JOIN nights n ON n.id = u.night "
                   "WHERE u.name = ? AND n.date >= ? AND (? = '' OR n.date <= ?) ORDER BY n.date");
    Statement expiries(db.handle,
                       "SELECT expiry, year_fraction, forward, discount_factor, vol, skew, "
                       "curvature, used, inside, rms_vol FROM slices "
                       "WHERE night = ? AND name = ? ORDER BY expiry");
    find.bind(name_id).bind(std::string_view(from)).bind(std::string_view(to));
    find.bind(std::string_view(to));
    while (find.step()) {
      HistoryNight night{find.text(1), as_of_from(find, 2), find.text(5), {{}}};
      auto& u = night.underlyings.front();
      u.record = {name,
                  status_from(find.text(6)),
                  find.integer(9) != 0,
                  0,
                  find.integer(10),
                  find.integer(11),
                  find.integer(12),
                  find.text(8),
                  find.text(7)};
      u.term_slope = find.number(13);
      expiries.bind(find.integer(0)).bind(name_id);
      while (expiries.step()) u.slices.push_back(slice_from(expiries));
      expiries.rewind();
      u.record.slices = static_cast<std::int64_t>(u.slices.size());
      nights.push_back(std::move(night));
    }
    return nights;
  });
}

Result<std::optional<std::string>> History::surface(const std::string& date,
                                                    const std::string& name) {
  auto& db = *database_;
  return db.attempt([&]() -> std::optional<std::string> {
    Statement find(db.handle,
                   "SELECT s.surface FROM surfaces s JOIN nights n ON n.id = s.night "
                   "WHERE n.date = ? AND s.name = ?");
    find.bind(std::string_view(date)).bind(db.name_id(name));
    if (!find.step()) return std::nullopt;
    return unpacked(find.text(0));
  });
}

Result<std::map<std::string, TermNights>> History::terms(const std::string& before, int most) {
  auto& db = *database_;
  return db.attempt([&] {
    std::vector<std::int64_t> nights;  // the last first
    Statement find(db.handle, "SELECT id FROM nights WHERE date < ? ORDER BY date DESC LIMIT ?");
    find.bind(std::string_view(before)).bind(std::int64_t{most});
    while (find.step()) nights.push_back(find.integer(0));
    // One night after another, in the order in which rows lie in the file: a join would cost more
    // than all the rest.
    std::unordered_map<std::int64_t, TermNights> by_id;
    Statement points(db.handle,
                     "SELECT name, year_fraction, vol FROM slices WHERE night = ? "
                     "ORDER BY name, expiry");
    for (auto night = nights.rbegin(); night != nights.rend(); ++night) {
      const auto marked = db.marked_names(*night);
      std::int64_t current = 0;
      TermNights* terms = nullptr;
      points.bind(*night);
      while (points.step()) {
        const std::int64_t id = points.integer(0);
        if (id != current || !terms) {
          current = id;
          terms = marked.count(id) > 0 ? &by_id[id] : nullptr;
          if (terms) terms->emplace_back();
        }
        if (terms) terms->back().push_back({points.number(1), points.number(2)});
      }
      points.rewind();
    }
    std::map<std::string, TermNights> out;
    Statement names(db.handle, "SELECT id, name FROM names");
    while (names.step())
      if (const auto found = by_id.find(names.integer(0)); found != by_id.end())
        out[names.text(1)] = std::move(found->second);
    return out;
  });
}

}  // namespace duskgrid::publish

// Runs that are killed, stopped, locked out, or find no room: what was published before stays, and
// the next run is clean.
#include <gtest/gtest.h>
#include <sys/file.h>

#include <algorithm>
#include <chrono>
#include <csignal>
#include <cstdlib>
#include <random>
#include <thread>
#include <utility>

#include "end_to_end/program.h"

namespace duskgrid::end_to_end {
namespace {

using namespace std::chrono_literals;
using SteadyClock = std::chrono::steady_clock;
using Files = std::map<std::string, std::string>;

const fs::path kNight = fs::path(DUSKGRID_SOURCE_DIR) / "data/demo_night";
constexpr const char* kDate = "2031-03-14";
// Statuses of the demo night, which has a name that cannot be marked, and of a run killed by
// SIGKILL as program.h gives it.
constexpr int kSomeRefused = 4, kKilled = 128 + SIGKILL;

// A program at work, its output in files.
class Running {
 public:
  explicit Running(std::vector<std::string> arguments) {
    arguments.insert(arguments.begin(), DUSKGRID_PROGRAM);
    std::vector<char*> argv;
    for (auto& a : arguments) argv.push_back(a.data());
    argv.push_back(nullptr);
    const std::string out = (scratch_ / "out").string(), err = (scratch_ / "err").string();
    posix_spawn_file_actions_t actions;
    posix_spawn_file_actions_init(&actions);
    constexpr int kFlags = O_WRONLY | O_CREAT;
    posix_spawn_file_actions_addopen(&actions, STDOUT_FILENO, out.c_str(), kFlags, 0600);
    posix_spawn_file_actions_addopen(&actions, STDERR_FILENO, err.c_str(), kFlags, 0600);
    EXPECT_EQ(posix_spawn(&child_, argv[0], &actions, nullptr, argv.data(), environ), 0);
    posix_spawn_file_actions_destroy(&actions);
  }
  ~Running() {
    if (child_ <= 0) return;
    signal(SIGKILL);
    wait();
  }
  Running(const Running&) = delete;
  Running& operator=(const Running&) = delete;

  bool exited() const {
    siginfo_t info{};
    return waitid(P_PID, static_cast<id_t>(child_), &info, WEXITED | WNOHANG | WNOWAIT) == 0 &&
           info.si_pid != 0;
  }
  void signal(int number) const { ::kill(child_, number); }
  Ran wait() {
    int state = 0;
    waitpid(std::exchange(child_, 0), &state, 0);
    return {WIFEXITED(state) ? WEXITSTATUS(state) : 128 + WTERMSIG(state), slurp(scratch_ / "out"),
            slurp(scratch_ / "err")};
  }

 private:
  Scratch scratch_;
  pid_t child_ = 0;
};

// Every file under a folder but those that differ between equal runs, the history's pages among
// them; links by where they lead.
Files files_in(const fs::path& folder) {
  Files files;
  for (const auto& entry : fs::recursive_directory_iterator(folder)) {
    const auto name = fs::relative(entry.path().parent_path(), folder) / entry.path().filename();
    const std::string file = entry.path().filename();
    if (file == "timings.json" || file == ".lock" || file.starts_with("history.sqlite")) continue;
    if (entry.is_symlink())
      files[name.lexically_normal()] = "-> " + fs::read_symlink(entry.path()).string();
    else if (entry.is_regular_file())
      files[name.lexically_normal()] = slurp(entry.path());
    else
      files[name.lexically_normal().string() + "/"] = "";
  }
  return files;
}

class InterruptedRun : public testing::Test {
 protected:
  std::vector<std::string> good() const { return night(kNight / "night.toml"); }
  // The same night on another axis: other bytes in the folder of the same date.
  std::vector<std::string> other() {
    if (!fs::exists(scratch_ / "night")) fs::copy(kNight, scratch_ / "night");
    std::string text = slurp(kNight / "night.toml");
    replace_line(text, "axis = ", "axis = \"log_moneyness\"");
    spill(scratch_ / "night/night.toml", text);
    return night(scratch_ / "night/night.toml");
  }
  // A night whose grid is large enough that a run of it takes its time.
  std::vector<std::string> long_one() {
    other();
    std::string text = slurp(scratch_ / "night/night.toml");
    std::string points = "points = [0", tenors = "tenors = [\"1W\"";
    for (int i = 1; i < 500; ++i) points += "," + std::to_string(1e-3 * i);
    for (int i = 2; i < 100; ++i) tenors += ",\"" + std::to_string(i) + "W\"";
    replace_line(text, "points = ", points + "]");
    replace_line(text, "tenors = ", tenors + "]");
    spill(scratch_ / "night/night.toml", text);
    return night(scratch_ / "night/night.toml");
  }
  static void replace_line(std::string& text, const std::string& start, const std::string& by) {
    const auto at = text.find("\n" + start);
    ASSERT_NE(at, std::string::npos) << start;
    text.replace(at + 1, text.find('\n', at + 1) - at - 1, by);
  }
  std::vector<std::string> night(const fs::path& toml) const {
    return {"build", toml.string(), "--out", out().string(), "--quiet"};
  }
  fs::path out() const { return scratch_ / "out"; }
  fs::path folder() const { return out() / kDate; }
  // What the history says of one name.
  std::string series() const {
    const auto ran = duskgrid({"history", "QNOR", "--out", out().string()});
    EXPECT_EQ(ran.status, 0) << ran.err;
    return ran.out;
  }
  void publish_good() { ASSERT_EQ(duskgrid(good()).status, kSomeRefused); }
  // What the run at work says of itself once it holds the lock.
  std::string wait_for_holder() const {
    std::string record;
    for (int i = 0; i < 60'000 && record.empty(); ++i) {
      std::this_thread::sleep_for(1ms);
      record = slurp(out() / ".lock");
    }
    EXPECT_NE(record, "");
    return record;
  }
  bool wait_for(const std::string& name) const {
    for (int i = 0; i < 60'000 && !fs::exists(out() / name); ++i) std::this_thread::sleep_for(1ms);
    return fs::exists(out() / name);
  }

  Scratch scratch_;
};

int kills_asked() {
  const char* text = std::getenv("DUSKGRID_KILLS");
  return text != nullptr ? std::atoi(text) : 20;
}

// Half of the kills fall anywhere in a run; the other half soon after a run has begun to write,
// where there is something to tear.
TEST_F(InterruptedRun, KilledAtAnyInstantLeavesACompleteRunAndTheNextIsClean) {
  constexpr unsigned kSeed = 20310314;
  std::mt19937_64 random(kSeed);
  publish_good();
  const Files first = files_in(folder());
  const std::string first_series = series();
  const auto begin = SteadyClock::now();
  const auto arguments = other();
  ASSERT_EQ(duskgrid(arguments).status, kSomeRefused);
  const std::chrono::duration<double> whole = SteadyClock::now() - begin;
  const Files second = files_in(folder());
  ASSERT_NE(first, second);
  // The grids differ, not the surfaces: the history says the same of both, whole, at any instant.
  ASSERT_EQ(series(), first_series);
  publish_good();

  int killed = 0, writing = 0, replaced = 0;
  for (int i = 0; i < kills_asked(); ++i) {
    SCOPED_TRACE("kill " + std::to_string(i) + ", seed " + std::to_string(kSeed));
    const fs::path partial = out() / (std::string(".partial-") + kDate);
    const bool late = i % 4 >= 2, stale = fs::exists(partial);
    // Turn by turn, so that each kill is of a run that would change what is there.
    Running running(i % 2 == 0 ? arguments : good());
    const double share = std::uniform_real_distribution<double>(0, 1)(random);
    // What an earlier kill left must go before this run's own can come.
    while (late && stale && fs::exists(partial) && !running.exited()) {
    }
    while (late && !fs::exists(partial) && !running.exited()) {
    }
    std::this_thread::sleep_for((late ? 0.5 : 1.0) * share * whole);
    running.signal(SIGKILL);
    const int status = running.wait().status;
    ASSERT_TRUE(status == kKilled || status == kSomeRefused) << status;
    killed += status == kKilled;
    writing += fs::exists(partial);
    const auto now = files_in(folder());
    ASSERT_TRUE(now == first || now == second) << "neither the one run nor the other";
    replaced += i % 2 == 0 ? now == second : now == first;
    const auto checked = duskgrid({"check", folder().string()});
    ASSERT_EQ(checked.status, 0) << checked.out << checked.err;
    ASSERT_EQ(fs::read_symlink(out() / "latest"), kDate);
    ASSERT_TRUE(fs::exists(out() / "latest" / "run.json"));
    ASSERT_EQ(series(), first_series);
  }
  std::printf("%d of %d runs killed, %d left a partial folder, %d had replaced the earlier run\n",
              killed, kills_asked(), writing, replaced);
  EXPECT_GT(killed, 0);
  publish_good();
  Files whole_out{{std::string(kDate) + "/", ""}, {"latest", std::string("-> ") + kDate}};
  for (const auto& [name, text] : first) whole_out[std::string(kDate) + "/" + name] = text;
  EXPECT_TRUE(files_in(out()) == whole_out) << "something is beside the run, or other than it was";
}

TEST_F(InterruptedRun, SignalStopsWithNothingLeftAndItsOwnStatus) {
  publish_good();
  const Files before = files_in(out());
  const auto arguments = long_one();
  for (const int number : {SIGTERM, SIGINT, SIGHUP})
    for (const bool writing : {false, true}) {
      SCOPED_TRACE(std::to_string(number) + (writing ? " while writing" : " before"));
      spill(out() / ".lock", "");  // an ended process may not have wiped its name
      Running running(arguments);
      wait_for_holder();
      if (writing) {
        ASSERT_TRUE(wait_for(std::string(".partial-") + kDate));
      }
      std::this_thread::sleep_for(30ms);
      running.signal(number);
      const auto ran = running.wait();
      EXPECT_EQ(ran.status, 128 + number) << ran.err;
      EXPECT_EQ(ran.out, "");
      EXPECT_EQ(ran.err.rfind("duskgrid: stopped by SIG", 0), 0u) << ran.err;
      EXPECT_EQ(std::count(ran.err.begin(), ran.err.end(), '\n'), 1) << ran.err;
      EXPECT_EQ(files_in(out()), before);
    }
  EXPECT_EQ(duskgrid(good()).status, kSomeRefused) << "the lock is free";
}

TEST_F(InterruptedRun, IgnoredHangUpStaysIgnored) {
  std::signal(SIGHUP, SIG_IGN);  // as nohup does; a child inherits it
  Running running(good());
  std::signal(SIGHUP, SIG_DFL);
  std::this_thread::sleep_for(10ms);
  running.signal(SIGHUP);
  EXPECT_EQ(running.wait().status, kSomeRefused);
}

TEST_F(InterruptedRun, SecondRunIsToldWhoHoldsTheFolderOrWaits) {
  publish_good();
  const auto arguments = long_one();
  Running first(arguments);
  const std::string record = wait_for_holder();
  const auto second = duskgrid(good());
  EXPECT_EQ(second.status, 73);
  EXPECT_EQ(second.out, "");
  EXPECT_NE(second.err.find(record.substr(0, record.find('\n'))), std::string::npos) << second.err;
  auto waiting = good();
  waiting.insert(waiting.end(), {"--wait", "600"});
  Running third(waiting);
  std::this_thread::sleep_for(50ms);
  first.signal(SIGKILL);
  first.wait();
  EXPECT_EQ(third.wait().status, kSomeRefused);
  EXPECT_EQ(duskgrid({"check", folder().string()}).status, 0);
}

TEST_F(InterruptedRun, StoppedWhileWaitingItGivesUp) {
  publish_good();
  const Files before = files_in(out());
  const int lock = ::open((out() / ".lock").c_str(), O_RDWR | O_CLOEXEC);
  ASSERT_EQ(::flock(lock, LOCK_EX | LOCK_NB), 0);
  auto waiting = good();
  waiting.insert(waiting.end(), {"--wait", "600"});
  Running running(waiting);
  std::this_thread::sleep_for(200ms);
  running.signal(SIGTERM);
  EXPECT_EQ(running.wait().status, 128 + SIGTERM);
  ::close(lock);
  EXPECT_EQ(files_in(out()), before);
}

// Runs a shell script whose mounts are its own and end with it.
int in_own_mounts(const std::string& script) {
  std::vector<std::string> arguments{"--mount"};
  if (geteuid() != 0) arguments.emplace_back("--map-root-user");
  arguments.insert(arguments.end(), {"sh", "-c", script});
  return run("/usr/bin/unshare", arguments).status;
}

// Some containers forbid mounts even to root. There a limit on file sizes stands in for the full
// disk (LimitOnFileSizesIsAFullDisk), and what needs a mount is skipped.
bool may_mount(const fs::path& place) {
  fs::create_directories(place);
  return in_own_mounts("mount -t tmpfs none " + place.string()) == 0;
}

// Kilobytes that a folder takes on a disk of 4 kB blocks.
int kilobytes_of(const fs::path& folder) {
  constexpr int kBlock = 4;
  int total = 0;
  for (const auto& entry : fs::recursive_directory_iterator(folder)) {
    const auto bytes = entry.is_regular_file() ? entry.file_size() : 1;
    total += kBlock * static_cast<int>((bytes + kBlock * 1024 - 1) / (kBlock * 1024));
  }
  return total;
}

// A disk of any size that does not hold the second run: from too small for its first file to
// almost large enough.
TEST_F(InterruptedRun, FullDiskLeavesTheEarlierRunAndSaysSo) {
  if (!may_mount(scratch_ / "disk")) GTEST_SKIP() << "no file system may be mounted here";
  const std::string disk = (scratch_ / "disk").string(), saved = (scratch_ / "saved").string();
  spill(scratch_ / "few.csv",
        "underlying,expiry,strike,put_call,bid,ask,underlying_price\n"
        "HALYRD,2031-06-20,95,P,1.9,2.0,100\nHALYRD,2031-06-20,100,C,3.9,4.0,100\n"
        "HALYRD,2031-06-20,100,P,3.8,3.9,100\nHALYRD,2031-06-20,105,C,1.9,2.0,100\n");
  const std::string program = DUSKGRID_PROGRAM, few = (scratch_ / "few.csv").string();
  // What both take, with room for the journal of the history.
  constexpr int kJournal = 200;
  const fs::path trial = scratch_ / "trial";
  ASSERT_LT(duskgrid({"build", few, "--as-of", "2031-03-14", "--out", trial.string()}).status, 5);
  const int small = kilobytes_of(trial) + kJournal;
  publish_good();
  const int large = kilobytes_of(folder());
  int full = 0;
  for (const double share : {0.03, 0.1, 0.3, 0.5, 0.8, 0.95}) {
    const int kilobytes = small + static_cast<int>(share * large);
    SCOPED_TRACE(kilobytes);
    fs::remove_all(saved);
    const int status = in_own_mounts(
        "mount -t tmpfs -o size=" + std::to_string(kilobytes) + "k none " + disk + " || exit 1\n" +
        program + " build " + few + " --as-of 2031-03-14 --out " + disk + "/out --quiet\n" +
        "test $? -lt 5 || exit 1\ncp -a " + disk + "/out " + saved + "-before\n" + program +
        " build " + (kNight / "night.toml").string() + " --out " + disk + "/out --quiet 2> " +
        saved + "-message\necho $? > " + saved + "-status\ncp -a " + disk + "/out " + saved + "\n" +
        program + " check " + disk + "/out/2031-03-14\n");
    ASSERT_EQ(status, 0) << "what stands after it is not sound";
    const int built = std::stoi(slurp(saved + "-status"));
    const std::string message = slurp(saved + "-message");
    if (built != kSomeRefused) {
      ++full;
      EXPECT_EQ(built, 73) << message;
      EXPECT_EQ(files_in(saved), files_in(saved + "-before"));
      EXPECT_EQ(std::count(message.begin(), message.end(), '\n'), 1) << message;
      EXPECT_NE(message.find("the earlier run " + disk + "/out/2031-03-14 is untouched"),
                std::string::npos)
          << message;
    }
    fs::remove_all(saved + "-before");
  }
  EXPECT_GE(full, 3) << "the disks were too large";
}

TEST_F(InterruptedRun, ReadOnlyDiskIsFoundBeforeTheWorkAndNamesTheEarlierRun) {
  if (!may_mount(scratch_ / "disk")) GTEST_SKIP() << "no file system may be mounted here";
  publish_good();
  const Files before = files_in(out());
  const std::string place = out().string(), message = (scratch_ / "message").string();
  const int status = in_own_mounts("mount --bind " + place + " " + place + " || exit 1\n" +
                                   "mount -o remount,ro,bind " + place + " || exit 1\n" +
                                   DUSKGRID_PROGRAM + " build " + (kNight / "night.toml").string() +
                                   " --out " + place + " --quiet 2> " + message + "\n");
  EXPECT_EQ(status, 73);
  EXPECT_NE(slurp(message).find("the earlier run " + folder().string() + " is untouched"),
            std::string::npos)
      << slurp(message);
  EXPECT_EQ(files_in(out()), before);
}

TEST_F(InterruptedRun, LimitOnFileSizesIsAFullDisk) {
  publish_good();
  const Files before = files_in(out());
  // In blocks of 512 bytes: less than the ledger.
  const auto ran = run("/bin/sh", {"-c", "ulimit -f 100; exec " DUSKGRID_PROGRAM " build " +
                                             (kNight / "night.toml").string() + " --out " +
                                             out().string() + " --quiet"});
  EXPECT_EQ(ran.status, 73) << ran.err;
  EXPECT_EQ(files_in(out()), before);
}

TEST_F(InterruptedRun, StandardOutputThatCannotBeWrittenIsSaid) {
  const auto to_full = [](const std::string& arguments) {
    return run("/bin/sh", {"-c", DUSKGRID_PROGRAM " " + arguments + " > /dev/full"});
  };
  const auto built =
      to_full("build " + (kNight / "night.toml").string() + " --quiet --out " + out().string());
  EXPECT_EQ(built.status, 73) << built.err;
  EXPECT_EQ(duskgrid({"check", folder().string()}).status, 0)
      << "the run is published all the same";
  for (const std::string command : {"value", "check"}) {
    const auto ran = to_full(
        command + " " + (command == "value" ? folder() / "surfaces/QNOR.json" : folder()).string());
    EXPECT_EQ(ran.status, 73) << command << ran.err;
    EXPECT_NE(ran.err.find("standard output"), std::string::npos) << ran.err;
  }
}

}  // namespace
}  // namespace duskgrid::end_to_end

#include "publish/run_folder.h"

#include <gtest/gtest.h>
#include <sys/resource.h>
#include <unistd.h>

#include <csignal>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <map>
#include <string>
#include <thread>
#include <vector>

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

using Files = std::map<std::string, std::string>;

std::string content_of(const fs::path& path) {
  std::ifstream file(path, std::ios::binary);
  return {std::istreambuf_iterator<char>(file), {}};
}

// Files under a folder by relative path, but for the lock.
Files files_in(const fs::path& folder) {
  Files files;
  for (const auto& entry : fs::recursive_directory_iterator(folder))
    if (entry.is_regular_file() && entry.path().filename() != ".lock")
      files[fs::relative(entry.path(), folder)] = content_of(entry.path());
  return files;
}

// A limit on file sizes stands in for a full disk while it lives.
class FullDisk {
 public:
  explicit FullDisk(rlim_t bytes) {
    handler_ = std::signal(SIGXFSZ, SIG_IGN);
    getrlimit(RLIMIT_FSIZE, &before_);
    const rlimit now{bytes, before_.rlim_max};
    setrlimit(RLIMIT_FSIZE, &now);
  }
  ~FullDisk() {
    setrlimit(RLIMIT_FSIZE, &before_);
    std::signal(SIGXFSZ, handler_);
  }
  FullDisk(const FullDisk&) = delete;
  FullDisk& operator=(const FullDisk&) = delete;

 private:
  rlimit before_{};
  void (*handler_)(int);
};

// Root may write anywhere: while this lives it is nobody in particular.
class WithoutPrivilege {
 public:
  WithoutPrivilege() : before_(geteuid()) {
    constexpr uid_t kNobody = 65534;
    if (before_ == 0) become(kNobody);
  }
  ~WithoutPrivilege() {
    if (before_ == 0) become(before_);
  }
  WithoutPrivilege(const WithoutPrivilege&) = delete;
  WithoutPrivilege& operator=(const WithoutPrivilege&) = delete;

 private:
  static void become(uid_t user) { EXPECT_EQ(seteuid(user), 0); }
  uid_t before_;
};

class RunFolderTest : public testing::Test {
 protected:
  void SetUp() override { fs::remove_all(out_); }
  void TearDown() override { fs::remove_all(out_); }

  std::unique_ptr<RunFolder> created(const std::string& name = "night") {
    auto folder = RunFolder::create(out_, name);
    if (!folder) {
      ADD_FAILURE() << folder.failure().text();
      return nullptr;
    }
    return std::move(*folder);
  }
  static Result<bool> add(RunFolder& folder, const std::string& path, const std::string& text) {
    return folder.add(path, [&](RunFile& file) { file.write(text); });
  }
  void publish(const Files& files, const std::string& name = "night") {
    const auto folder = created(name);
    for (const auto& [path, text] : files) ASSERT_TRUE(add(*folder, path, text).ok());
    ASSERT_TRUE(folder->commit().ok());
  }

  std::string out_ = testing::TempDir() + "run_folder_test_" +
                     testing::UnitTest::GetInstance()->current_test_info()->name();
};

TEST_F(RunFolderTest, CommittedFilesAreInPlaceWithNothingBeside) {
  publish({{"a.csv", "one\n"}, {"surfaces/A.json", "{}"}});
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "one\n"}, {"night/surfaces/A.json", "{}"}}));
}

TEST_F(RunFolderTest, MissingOutFolderIsMadeWithItsParents) {
  out_ += "/deep/er";
  publish({{"a.csv", "one\n"}});
  EXPECT_EQ(content_of(out_ + "/night/a.csv"), "one\n");
  fs::remove_all(fs::path(out_).parent_path().parent_path());
}

TEST_F(RunFolderTest, NothingIsSeenBeforeTheCommit) {
  const auto folder = created();
  ASSERT_TRUE(add(*folder, "a.csv", "one\n").ok());
  EXPECT_FALSE(fs::exists(out_ + "/night"));
}

TEST_F(RunFolderTest, AbandonedRunLeavesNothing) {
  ASSERT_TRUE(add(*created(), "a.csv", "one\n").ok());
  EXPECT_EQ(files_in(out_), Files{});
}

TEST_F(RunFolderTest, AbandonedRunLeavesTheOldOneUntouched) {
  publish({{"a.csv", "old\n"}});
  ASSERT_TRUE(add(*created(), "a.csv", "new\n").ok());
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "old\n"}}));
}

TEST_F(RunFolderTest, EarlierFolderIsReplacedWhole) {
  publish({{"a.csv", "old\n"}, {"surfaces/GONE.json", "{}"}});
  publish({{"a.csv", "new\n"}});
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "new\n"}}));
}

TEST_F(RunFolderTest, OtherNightsStay) {
  publish({{"a.csv", "first\n"}}, "2031-03-13");
  publish({{"a.csv", "second\n"}}, "2031-03-14");
  EXPECT_EQ(files_in(out_),
            (Files{{"2031-03-13/a.csv", "first\n"}, {"2031-03-14/a.csv", "second\n"}}));
}

TEST_F(RunFolderTest, DigestsAreThoseOfTheFilesByPath) {
  const auto folder = created();
  // Longer than what is written at once.
  const std::string text(1'000'000, 'x');
  ASSERT_TRUE(add(*folder, "surfaces/A.json", text).ok());
  ASSERT_TRUE(add(*folder, "empty.csv", "").ok());
  ASSERT_TRUE(folder->commit().ok());
  ASSERT_EQ(folder->digests().size(), 2U);
  for (const auto& [path, sha256] : folder->digests())
    EXPECT_EQ(digest_file(folder->final_path() + "/" + path)->sha256, sha256) << path;
}

TEST_F(RunFolderTest, SecondHolderOfTheLockIsRefused) {
  const auto first = created();
  const auto second = RunFolder::create(out_, "other");
  ASSERT_FALSE(second.ok());
  EXPECT_EQ(second.failure().fault, Fault::cannot_create);
  EXPECT_EQ(second.failure().where, out_);
  // The refused one must not clear away what the first is writing.
  ASSERT_TRUE(add(*first, "a.csv", "one\n").ok());
  EXPECT_TRUE(first->commit().ok());
}

TEST_F(RunFolderTest, LockIsFreeOnceItsHolderIsGone) {
  created().reset();
  EXPECT_TRUE(RunFolder::create(out_, "night").ok());
}

TEST_F(RunFolderTest, LeftoversOfKilledRunsAreClearedWhateverTheirNight) {
  for (const char* name : {".partial-night", ".partial-2031-03-13"}) {
    fs::create_directories(out_ + "/" + name);
    std::ofstream(out_ + "/" + name + "/a.csv") << "half";
  }
  publish({{"b.csv", "whole\n"}});
  EXPECT_EQ(files_in(out_), (Files{{"night/b.csv", "whole\n"}}));
}

TEST_F(RunFolderTest, RunThatSteppedAsideForAKilledOneComesBack) {
  fs::create_directories(out_ + "/.partial-2031-03-13.old");
  std::ofstream(out_ + "/.partial-2031-03-13.old/a.csv") << "good\n";
  created("2031-03-14").reset();
  EXPECT_EQ(files_in(out_), (Files{{"2031-03-13/a.csv", "good\n"}}));
}

TEST_F(RunFolderTest, RunThatSteppedAsideForACompleteOneIsCleared) {
  publish({{"a.csv", "new\n"}});
  fs::create_directories(out_ + "/.partial-night.old");
  std::ofstream(out_ + "/.partial-night.old/a.csv") << "old\n";
  created("other").reset();
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "new\n"}}));
}

TEST_F(RunFolderTest, RefusedRunThatSteppedAsideDoesNotTakeThePlaceOfAGoodOne) {
  fs::create_directories(out_ + "/.partial-night-refused.old");
  std::ofstream(out_ + "/.partial-night-refused.old/a.csv") << "refused\n";
  created("night").reset();
  EXPECT_EQ(files_in(out_), (Files{{"night-refused/a.csv", "refused\n"}}));
}

TEST_F(RunFolderTest, LinkHalfMadeByAKilledRunIsCleared) {
  fs::create_directories(out_);
  fs::create_symlink("night", out_ + "/.partial-latest");
  publish({{"a.csv", "one\n"}});
  EXPECT_FALSE(fs::is_symlink(out_ + "/.partial-latest"));
  EXPECT_EQ(fs::read_symlink(out_ + "/latest"), "night");
}

TEST_F(RunFolderTest, LatestLeadsToTheLatestNightAndNotToTheLastOneRun) {
  publish({{"a.csv", "first\n"}}, "2031-03-13");
  EXPECT_EQ(fs::read_symlink(out_ + "/latest"), "2031-03-13");
  publish({{"a.csv", "second\n"}}, "2031-03-14");
  EXPECT_EQ(fs::read_symlink(out_ + "/latest"), "2031-03-14");
  publish({{"a.csv", "again\n"}}, "2031-03-13");
  EXPECT_EQ(fs::read_symlink(out_ + "/latest"), "2031-03-14");
  EXPECT_EQ(content_of(out_ + "/latest/a.csv"), "second\n");
}

TEST_F(RunFolderTest, LatestThatLeadsNowhereGivesWay) {
  fs::create_directories(out_);
  fs::create_symlink("2031-12-31", out_ + "/latest");
  publish({{"a.csv", "one\n"}}, "2031-03-14");
  EXPECT_EQ(fs::read_symlink(out_ + "/latest"), "2031-03-14");
}

TEST_F(RunFolderTest, FolderNamedLatestIsLeftAloneWithARemark) {
  fs::create_directories(out_ + "/latest");
  const auto folder = created();
  ASSERT_TRUE(add(*folder, "a.csv", "one\n").ok());
  ASSERT_TRUE(folder->commit().ok());
  EXPECT_TRUE(fs::is_directory(fs::symlink_status(out_ + "/latest")));
  ASSERT_EQ(folder->remarks().size(), 1U);
  EXPECT_NE(folder->remarks()[0].find("latest"), std::string::npos);
}

TEST_F(RunFolderTest, RunWithoutMarksGoesBesideAndIsNeverTheLatest) {
  const auto without_marks = [&](const std::string& name) {
    const auto folder = created(name);
    EXPECT_TRUE(add(*folder, "a.csv", "none\n").ok());
    EXPECT_TRUE(folder->commit(false).ok());
    return folder->final_path();
  };
  EXPECT_EQ(without_marks("2031-03-13"), out_ + "/2031-03-13");
  EXPECT_FALSE(fs::is_symlink(out_ + "/latest"));
  publish({{"a.csv", "good\n"}}, "2031-03-14");
  EXPECT_EQ(without_marks("2031-03-14"), out_ + "/2031-03-14-refused");
  EXPECT_EQ(without_marks("2031-03-14"), out_ + "/2031-03-14-refused") << "a second time";
  EXPECT_EQ(content_of(out_ + "/latest/a.csv"), "good\n");
}

TEST_F(RunFolderTest, StopBeforeOrWhileWritingLeavesTheOldRun) {
  publish({{"a.csv", "old\n"}});
  for (const bool early : {true, false}) {
    std::stop_source source;
    auto folder = RunFolder::create(out_, "night", {0, source.get_token()});
    ASSERT_TRUE(folder.ok());
    if (early) source.request_stop();
    bool went_on = true;
    const auto written = (*folder)->add("a.csv", [&](RunFile& file) {
      EXPECT_TRUE(file.write("new\n"));
      source.request_stop();
      went_on = file.write("new\n");
    });
    ASSERT_FALSE(written.ok());
    EXPECT_EQ(written.failure().fault, Fault::stopped);
    EXPECT_EQ(went_on, early) << "where it is stopped already, nothing is filled";
    folder->reset();
    EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "old\n"}}));
  }
}

TEST_F(RunFolderTest, StopAfterTheLastFileLeavesTheOldRun) {
  publish({{"a.csv", "old\n"}});
  std::stop_source source;
  auto folder = RunFolder::create(out_, "night", {0, source.get_token()});
  ASSERT_TRUE(add(**folder, "a.csv", "new\n").ok());
  source.request_stop();
  const auto committed = (*folder)->commit();
  ASSERT_FALSE(committed.ok());
  EXPECT_EQ(committed.failure().fault, Fault::stopped);
  folder->reset();
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "old\n"}}));
}

TEST_F(RunFolderTest, FailureSaysWhatIsPublishedAndWhatIsNot) {
  publish({{"a.csv", "old\n"}});
  for (const std::string& name : {std::string("night"), std::string("other")}) {
    const auto folder = created(name);
    const FullDisk limit(4096);
    const auto written = add(*folder, "a.csv", std::string(1'000'000, 'x'));
    ASSERT_FALSE(written.ok());
    const auto text = written.failure().text();
    EXPECT_NE(text.find(name == "night" ? "the earlier run " + out_ + "/night is untouched"
                                        : "nothing is published"),
              std::string::npos)
        << text;
  }
}

TEST_F(RunFolderTest, FullDiskIsCannotCreateAndLeavesTheOldRun) {
  publish({{"a.csv", "old\n"}});
  {
    const auto folder = created();
    const FullDisk limit(4096);
    const auto written = add(*folder, "a.csv", std::string(1'000'000, 'x'));
    ASSERT_FALSE(written.ok());
    EXPECT_EQ(written.failure().fault, Fault::cannot_create);
    EXPECT_NE(written.failure().where.find("a.csv"), std::string::npos);
  }
  EXPECT_EQ(files_in(out_), (Files{{"night/a.csv", "old\n"}}));
}

TEST_F(RunFolderTest, OneFileTwiceIsRefused) {
  const auto folder = created();
  ASSERT_TRUE(add(*folder, "a.csv", "one\n").ok());
  const auto again = add(*folder, "a.csv", "two\n");
  ASSERT_FALSE(again.ok());
  EXPECT_EQ(again.failure().fault, Fault::cannot_create);
}

TEST_F(RunFolderTest, FileWhereOutShouldBeIsCannotCreate) {
  std::ofstream{out_};
  const auto folder = RunFolder::create(out_, "night");
  ASSERT_FALSE(folder.ok());
  EXPECT_EQ(folder.failure().fault, Fault::cannot_create);
  EXPECT_NE(folder.failure().text().find(out_), std::string::npos);
}

TEST_F(RunFolderTest, PlaceThatNobodyMayWriteToIsCannotCreate) {
  // /proc takes no folders, whoever asks.
  const auto folder = RunFolder::create("/proc/duskgrid-out", "night");
  ASSERT_FALSE(folder.ok());
  EXPECT_EQ(folder.failure().fault, Fault::cannot_create);
}

TEST_F(RunFolderTest, ReadOnlyFolderIsCannotCreate) {
  fs::create_directories(out_);
  fs::permissions(out_, fs::perms::owner_read | fs::perms::owner_exec | fs::perms::others_exec);
  const auto folder = [&] {
    const WithoutPrivilege ordinary;
    return RunFolder::create(out_, "night");
  }();
  fs::permissions(out_, fs::perms::owner_all);
  ASSERT_FALSE(folder.ok());
  EXPECT_EQ(folder.failure().fault, Fault::cannot_create);
}

TEST_F(RunFolderTest, FilesOfSeveralThreadsAreAllThere) {
  constexpr int kThreads = 4, kFiles = 50;
  const auto run = created();
  std::vector<std::thread> threads;
  for (int t = 0; t < kThreads; ++t)
    threads.emplace_back([&, t] {
      for (int i = 0; i < kFiles; ++i) {
        const auto name = std::to_string(t) + "-" + std::to_string(i);
        EXPECT_TRUE(run->add("pages/" + name, [&](RunFile& file) { file.write(name); }).ok());
      }
    });
  for (auto& thread : threads) thread.join();
  EXPECT_EQ(run->digests().size(), std::size_t{kThreads * kFiles});
  ASSERT_TRUE(run->commit().ok());
  EXPECT_EQ(content_of(run->final_path() + "/pages/3-49"), "3-49");
}

}  // namespace
}  // namespace duskgrid::publish

#include "publish/output_lock.h"

#include <gtest/gtest.h>
#include <sys/wait.h>
#include <unistd.h>

#include <chrono>
#include <csignal>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <optional>
#include <thread>

namespace duskgrid::publish {
namespace {

namespace fs = std::filesystem;

class OutputLockTest : public testing::Test {
 protected:
  void SetUp() override { fs::remove_all(out_); }
  void TearDown() override { fs::remove_all(out_); }
  std::string record() const {
    std::ifstream file(out_ + "/.lock", std::ios::binary);
    return {std::istreambuf_iterator<char>(file), {}};
  }
  OutputLock taken() {
    auto lock = OutputLock::take(out_, {});
    EXPECT_TRUE(lock.ok()) << (lock.ok() ? "" : lock.failure().text());
    return std::move(*lock);
  }

  std::string out_ = testing::TempDir() + "output_lock_test_" +
                     testing::UnitTest::GetInstance()->current_test_info()->name();
};

TEST_F(OutputLockTest, HolderIsNamedByProcessHostAndTime) {
  const auto first = taken();
  const auto second = OutputLock::take(out_, {});
  ASSERT_FALSE(second.ok());
  EXPECT_EQ(second.failure().fault, Fault::cannot_create);
  EXPECT_EQ(second.failure().where, out_);
  char host[256] = "";
  gethostname(host, sizeof host - 1);
  const auto& text = second.failure().detail;
  EXPECT_NE(text.find("process " + std::to_string(getpid()) + " on " + host + " since 20"),
            std::string::npos)
      << text;
}

TEST_F(OutputLockTest, FreedLockLeavesNoName) {
  { const auto lock = taken(); }
  EXPECT_EQ(record(), "");
  taken();
}

TEST_F(OutputLockTest, LockOfAKilledProcessIsNoObstacle) {
  int ready[2];
  ASSERT_EQ(pipe(ready), 0);
  const pid_t child = fork();
  if (child == 0) {
    const auto lock = OutputLock::take(out_, {});
    const char said = lock.ok() ? 'y' : 'n';
    if (write(ready[1], &said, 1) == 1) pause();
    _exit(0);
  }
  char said = 0;
  ASSERT_EQ(read(ready[0], &said, 1), 1);
  EXPECT_EQ(said, 'y');
  EXPECT_FALSE(OutputLock::take(out_, {}).ok());
  kill(child, SIGKILL);
  waitpid(child, nullptr, 0);
  close(ready[0]);
  close(ready[1]);
  EXPECT_NE(record(), "") << "what the killed one said of itself";
  taken();
}

TEST_F(OutputLockTest, WaitingEndsWhenTheHolderIsDone) {
  std::optional<OutputLock> first(taken());
  std::jthread freeing([&] {
    std::this_thread::sleep_for(std::chrono::milliseconds{120});
    first.reset();
  });
  constexpr double kMinute = 60;  // far more than it takes
  EXPECT_TRUE(OutputLock::take(out_, {kMinute, {}}).ok());
}

TEST_F(OutputLockTest, WaitingEndsWithItsTime) {
  const auto first = taken();
  const auto second = OutputLock::take(out_, {0.1, {}});
  ASSERT_FALSE(second.ok());
  EXPECT_EQ(second.failure().fault, Fault::cannot_create);
}

TEST_F(OutputLockTest, WaitingEndsWhenAskedToStop) {
  const auto first = taken();
  std::stop_source source;
  source.request_stop();
  constexpr double kForever = 1e9;
  const auto second = OutputLock::take(out_, {kForever, source.get_token()});
  ASSERT_FALSE(second.ok());
  EXPECT_EQ(second.failure().fault, Fault::stopped);
}

TEST_F(OutputLockTest, WhatStrangersWriteIntoTheLockIsShownAsOnePrintableLine) {
  const auto first = taken();
  std::ofstream(out_ + "/.lock", std::ios::binary) << "\x1b[2Jsomeone\r" << std::string(5000, 'x');
  const auto second = OutputLock::take(out_, {});
  ASSERT_FALSE(second.ok());
  const auto& text = second.failure().detail;
  EXPECT_NE(text.find("?[2Jsomeone?x"), std::string::npos) << text;
  EXPECT_LT(text.size(), 500U);
}

TEST_F(OutputLockTest, LockFileRemovedByHandIsMadeAgain) {
  { const auto lock = taken(); }
  fs::remove(out_ + "/.lock");
  const auto again = taken();
  EXPECT_FALSE(OutputLock::take(out_, {}).ok());
}

// Only the superuser can act as another user; the rest of the lock is tested without.
TEST_F(OutputLockTest, LockThatAnotherUserMadeCanBeTaken) {
  if (geteuid() != 0) GTEST_SKIP() << "needs the rights to act as two users";
  { const auto lock = taken(); }
  fs::permissions(out_, fs::perms::all);
  constexpr uid_t kNobody = 65534;
  ASSERT_EQ(seteuid(kNobody), 0);
  const bool ok = OutputLock::take(out_, {}).ok();
  ASSERT_EQ(seteuid(0), 0);
  EXPECT_TRUE(ok);
}

}  // namespace
}  // namespace duskgrid::publish

#include "stop_signals.h"

#include <fmt/format.h>
#include <poll.h>
#include <sys/eventfd.h>
#include <sys/signalfd.h>
#include <unistd.h>

#include <cstdint>
#include <cstdio>
#include <string>

namespace duskgrid::commands {
namespace {

// Of the second in which a stop is promised.
constexpr int kGraceMilliseconds = 500;

sigset_t heeded() {
  sigset_t set;
  sigemptyset(&set);
  for (const int number : {SIGINT, SIGTERM, SIGHUP}) {
    struct sigaction now {};
    if (sigaction(number, nullptr, &now) == 0 && now.sa_handler != SIG_IGN) sigaddset(&set, number);
  }
  return set;
}

const char* name_of(int number) {
  return number == SIGINT ? "SIGINT" : number == SIGTERM ? "SIGTERM" : "SIGHUP";
}

void say(int number, const std::string& what) {
  fmt::print(stderr, "duskgrid: stopped by {}: {}\n", name_of(number), what);
}

[[noreturn]] void die_of(int number) {
  sigset_t set;
  sigemptyset(&set);
  sigaddset(&set, number);
  std::signal(number, SIG_DFL);
  pthread_sigmask(SIG_UNBLOCK, &set, nullptr);
  std::raise(number);
  _exit(128 + number);
}

}  // namespace

StopSignals::StopSignals()
    : signals_(heeded()),
      caught_(signalfd(-1, &signals_, SFD_CLOEXEC)),
      done_(eventfd(0, EFD_CLOEXEC)) {
  // Without descriptors to spare, signals do what they always do.
  if (caught_ < 0 || done_ < 0) return;
  pthread_sigmask(SIG_BLOCK, &signals_, nullptr);
  listener_ = std::thread([this] { listen(); });
}

StopSignals::~StopSignals() {
  const std::uint64_t one = 1;
  if (listener_.joinable() && ::write(done_, &one, sizeof one) == sizeof one) listener_.join();
  if (listener_.joinable()) listener_.detach();
  ::close(caught_);
  ::close(done_);
}

int StopSignals::next(int milliseconds) const {
  pollfd ready[] = {{done_, POLLIN, 0}, {caught_, POLLIN, 0}};
  if (::poll(ready, 2, milliseconds) <= 0 || ready[0].revents != 0) return 0;
  signalfd_siginfo info{};
  return ::read(caught_, &info, sizeof info) == sizeof info ? static_cast<int>(info.ssi_signo) : 0;
}

void StopSignals::listen() {
  const int first = next(-1);
  if (first == 0) return;
  first_ = first;
  source_.request_stop();
  int second = next(kGraceMilliseconds);
  pollfd done{done_, POLLIN, 0};
  if (second == 0 && ::poll(&done, 1, 0) == 0) {
    if (!writing_) {
      say(first, "nothing was written, what was published before is untouched");
      _exit(128 + first);
    }
    second = next(-1);
  }
  if (second != 0) die_of(second);
}

int StopSignals::report(const Failure& stopped) const {
  say(first_, stopped.detail);
  return 128 + first_;
}

}  // namespace duskgrid::commands

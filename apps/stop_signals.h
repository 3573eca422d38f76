// SIGINT, SIGTERM and SIGHUP as a request to stop.
#pragma once

#include <atomic>
#include <csignal>
#include <stop_token>
#include <thread>

#include "quotes/result.h"

namespace duskgrid::commands {

// While it lives a thread of its own takes these signals (those not ignored already, as under
// nohup), which every thread started meanwhile has blocked. The first asks for a stop. Work that
// has written nothing and does not stop within half a second is ended where it stands, since then
// nothing is lost; work that is writing takes the time to clear up. The second signal kills.
class StopSignals {
 public:
  StopSignals();
  // The signals stay blocked: one that comes after the work is done is no reason to call it undone.
  ~StopSignals();
  StopSignals(const StopSignals&) = delete;
  StopSignals& operator=(const StopSignals&) = delete;

  std::stop_token token() const { return source_.get_token(); }
  // From now on there is something to clear up. To be told before the token is looked at.
  void writing() { writing_ = true; }
  // Says on standard error which signal stopped the work, and returns 128 + its number.
  int report(const Failure& stopped) const;

 private:
  void listen();
  // The next signal; 0 when done, or after `milliseconds` unless negative.
  int next(int milliseconds) const;

  sigset_t signals_;
  int caught_;  // a descriptor that gives the signals
  int done_;    // one that can be read once nobody needs them
  std::stop_source source_;
  std::atomic<bool> writing_ = false;
  std::atomic<int> first_ = 0;
  std::thread listener_;
};

}  // namespace duskgrid::commands

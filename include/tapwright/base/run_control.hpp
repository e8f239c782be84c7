#pragma once
// How long work is watched, stopped and spread over threads.

#include <functional>
#include <stop_token>
#include <string_view>

namespace tapwright {

/// Passed down to anything slow. All members are optional; the default runs on one thread,
/// silently.
struct RunControl {
  std::stop_token stop;  ///< asked for often enough that Ctrl-C is answered within a second
  /// Called with the share done (0 to 1) and a short name of the stage; may come from any thread,
  /// one call at a time.
  std::function<void(double, std::string_view)> progress;
  int num_threads = 1;

  [[nodiscard]] bool stopped() const { return stop.stop_requested(); }
  void report(double share, std::string_view stage) const {
    if (progress) progress(share, stage);
  }
};

/// Calls `body(i)` for i = 0 ... count - 1, on up to `num_threads` threads. Each i is run once, in
/// no set order; write results to slot i so that they do not depend on the number of threads.
///
/// Errors: an exception out of `body` is thrown again here, the one with the smallest i.
void parallel_for(int count, int num_threads, const std::function<void(int)>& body);

}  // namespace tapwright

#include "tapwright/base/run_control.hpp"

#include <algorithm>
#include <atomic>
#include <exception>
#include <mutex>
#include <thread>
#include <vector>

namespace tapwright {

void parallel_for(int count, int num_threads, const std::function<void(int)>& body) {
  std::atomic<int> next{0};
  std::mutex mutex;
  int failed_index = count;
  std::exception_ptr failure;
  const auto work = [&] {
    for (int i = next++; i < count; i = next++) {
      try {
        body(i);
      } catch (...) {
        const std::lock_guard lock(mutex);
        if (i < failed_index) {
          failed_index = i;
          failure = std::current_exception();
        }
      }
    }
  };
  {
    std::vector<std::jthread> helpers;
    const int num_helpers = std::min(num_threads, count) - 1;
    for (int i = 0; i < num_helpers; ++i) helpers.emplace_back(work);
    work();
  }
  if (failure) std::rethrow_exception(failure);
}

}  // namespace tapwright

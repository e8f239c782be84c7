#include <pthread.h>
#include <unistd.h>

#include <csignal>
#include <ctime>
#include <functional>
#include <iostream>
#include <thread>

#include "cli/run.hpp"

namespace {

constexpr int kWake = SIGUSR1;  // ends the watch when the work is done

/// Waits for Ctrl-C (or a polite kill) in a thread of its own: first asks the work to stop, then,
/// when it has not within 0.9 s, ends the process. Files are renamed into place whole, so that
/// ending at any moment loses nothing.
void watch_signals(const sigset_t& signals, std::stop_source work) {
  const timespec patience{0, 900'000'000};
  int signal = 0;
  if (sigwait(&signals, &signal) != 0 || signal == kWake) return;
  work.request_stop();
  if (sigtimedwait(&signals, nullptr, &patience) != kWake) {
    _exit(static_cast<int>(tapwright::cli::ExitCode::kStopped));
  }
}

}  // namespace

int main(int argc, char** argv) {
  std::ios::sync_with_stdio(false);
  std::signal(SIGPIPE, SIG_IGN);  // a closed pipe or a full disk is a failed write, told in one line
  std::signal(SIGXFSZ, SIG_IGN);
  sigset_t signals;
  sigemptyset(&signals);
  for (const int signal : {SIGINT, SIGTERM, kWake}) sigaddset(&signals, signal);
  pthread_sigmask(SIG_BLOCK, &signals, nullptr);

  const std::stop_source work;
  std::thread watcher(watch_signals, std::cref(signals), work);
  const auto code = tapwright::cli::run(std::vector<std::string>(argv + 1, argv + argc), std::cout,
                                        std::cerr, work.get_token());
  pthread_kill(watcher.native_handle(), kWake);
  watcher.join();
  return static_cast<int>(code);
}

#pragma once
// Runs the program as users do, in a process of its own, under the conditions a test asks for.

#include <fcntl.h>
#include <poll.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <unistd.h>

#include <array>
#include <chrono>
#include <csignal>
#include <filesystem>
#include <fstream>
#include <optional>
#include <sstream>
#include <stdexcept>
#include <string>
#include <vector>

namespace tapwright::test {

struct Conditions {
  std::string program = TAPWRIGHT_PROGRAM;
  std::string folder;                       ///< working directory; empty = this one
  std::optional<rlim_t> largest_file;       ///< bytes (RLIMIT_FSIZE)
  bool without_privileges = false;          ///< as user and group 65534 when we are root
  bool closed_output = false;               ///< nobody reads standard output any more
  std::optional<double> signal_after_s;     ///< when `signal` is sent
  int signal = SIGINT;
};

struct Finished {
  int code = -1;    ///< exit code, -1 when a signal ended it
  int signal = 0;   ///< that signal
  std::string out;
  std::string err;
  double seconds_after_signal = 0.0;  ///< from the signal to the end
};

/// Everything the program does until it ends.
inline Finished run_process(const std::vector<std::string>& arguments,
                            const Conditions& conditions = {}) {
  using Clock = std::chrono::steady_clock;
  std::array<int, 2> out{};
  std::array<int, 2> err{};
  if (pipe2(out.data(), O_CLOEXEC) != 0 || pipe2(err.data(), O_CLOEXEC) != 0) {
    throw std::runtime_error("no pipe");
  }
  std::vector<std::string> words = {conditions.program};
  words.insert(words.end(), arguments.begin(), arguments.end());
  std::vector<char*> argv;
  for (std::string& word : words) argv.push_back(word.data());
  argv.push_back(nullptr);

  if (conditions.closed_output) close(out[0]);
  const pid_t child = fork();
  if (child == 0) {
    dup2(out[1], STDOUT_FILENO);
    dup2(err[1], STDERR_FILENO);
    bool ready = true;
    if (!conditions.folder.empty()) ready = ready && chdir(conditions.folder.c_str()) == 0;
    if (conditions.largest_file) {
      const rlimit limit{*conditions.largest_file, *conditions.largest_file};
      ready = ready && setrlimit(RLIMIT_FSIZE, &limit) == 0;
    }
    if (conditions.without_privileges && geteuid() == 0) {
      ready = ready && setgid(65534) == 0 && setuid(65534) == 0;
    }
    if (ready) execv(argv[0], argv.data());
    _exit(126);
  }
  close(out[1]);
  close(err[1]);

  Finished finished;
  const Clock::time_point start = Clock::now();
  std::optional<Clock::time_point> signalled;
  std::array<pollfd, 2> open = {pollfd{conditions.closed_output ? -1 : out[0], POLLIN, 0},
                                pollfd{err[0], POLLIN, 0}};
  std::array<std::string*, 2> texts = {&finished.out, &finished.err};
  while (open[0].fd >= 0 || open[1].fd >= 0) {
    int wait_ms = -1;
    if (conditions.signal_after_s && !signalled) {
      const auto due = start + std::chrono::duration<double>(*conditions.signal_after_s);
      wait_ms = static_cast<int>(
          std::chrono::duration_cast<std::chrono::milliseconds>(due - Clock::now()).count());
      if (wait_ms <= 0) {
        kill(child, conditions.signal);
        signalled = Clock::now();
        continue;
      }
    }
    poll(open.data(), open.size(), wait_ms);
    for (std::size_t i = 0; i < open.size(); ++i) {
      if (open[i].fd < 0 || open[i].revents == 0) continue;
      std::array<char, 65536> buffer;
      const ssize_t n = read(open[i].fd, buffer.data(), buffer.size());
      if (n > 0) {
        texts[i]->append(buffer.data(), static_cast<std::size_t>(n));
      } else {
        close(open[i].fd);
        open[i].fd = -1;
      }
    }
  }
  int status = 0;
  waitpid(child, &status, 0);
  if (signalled) {
    finished.seconds_after_signal =
        std::chrono::duration<double>(Clock::now() - *signalled).count();
  }
  if (WIFEXITED(status)) finished.code = WEXITSTATUS(status);
  if (WIFSIGNALED(status)) finished.signal = WTERMSIG(status);
  return finished;
}

/// A folder of its own for one test, gone afterwards.
class ScratchFolder {
 public:
  ScratchFolder() {
    std::string name = std::filesystem::temp_directory_path() / "tapwright-XXXXXX";
    if (mkdtemp(name.data()) == nullptr) throw std::runtime_error("no scratch folder");
    path_ = name;
    std::filesystem::permissions(path_, std::filesystem::perms::all);
  }
  ~ScratchFolder() {
    std::error_code ignored;
    std::filesystem::remove_all(path_, ignored);
  }
  ScratchFolder(const ScratchFolder&) = delete;
  ScratchFolder& operator=(const ScratchFolder&) = delete;
  [[nodiscard]] std::string operator/(const std::string& name) const { return path_ / name; }
  [[nodiscard]] const std::filesystem::path& path() const { return path_; }

 private:
  std::filesystem::path path_;
};

inline std::string contents(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  std::ostringstream text;
  text << file.rdbuf();
  return text.str();
}

inline void write_file(const std::string& path, const std::string& text) {
  std::ofstream(path, std::ios::binary) << text;
}

}  // namespace tapwright::test

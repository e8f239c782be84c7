#include "tapwright/channel/text_file.hpp"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <algorithm>
#include <cerrno>
#include <system_error>

#include "tapwright/base/digest.hpp"
#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

class Descriptor {
 public:
  explicit Descriptor(int fd) : fd_(fd) {}
  Descriptor(const Descriptor&) = delete;
  Descriptor& operator=(const Descriptor&) = delete;
  ~Descriptor() {
    if (fd_ >= 0) ::close(fd_);
  }
  [[nodiscard]] int get() const { return fd_; }

 private:
  int fd_;
};

std::string reason(int error) { return std::generic_category().message(error); }

std::string size_text(std::size_t bytes) {
  if (bytes >= std::size_t{1} << 20) {
    return significant(static_cast<double>(bytes) / (1 << 20), 4) + " MiB";
  }
  return std::to_string(bytes) + " bytes";
}

}  // namespace

Result<TextFile> read_text_file(const std::string& path, std::size_t max_bytes) {
  const auto fail = [&](const std::string& message) {
    return failure<TextFile>(error_at(path, 0, message));
  };
  if (path.empty()) return fail("found an empty path; wanted a file");
  if (path.find('\0') != std::string::npos) return fail("found a zero byte in the path");
  const Descriptor file(::open(path.c_str(), O_RDONLY | O_CLOEXEC));
  if (file.get() < 0) {
    const int error = errno;
    if (error == ENOENT) return fail("no such file");
    return fail("can't be opened: " + reason(error));
  }
  struct stat status {};
  if (::fstat(file.get(), &status) != 0) return fail("can't be read: " + reason(errno));
  if (S_ISDIR(status.st_mode)) return fail("found a directory; wanted a file");

  const std::string too_large = "; at most " + size_text(max_bytes) + " are read";
  TextFile result;
  if (S_ISREG(status.st_mode)) {
    const auto size = static_cast<std::size_t>(status.st_size);
    if (size > max_bytes) return fail("found a file of " + size_text(size) + too_large);
    result.text.reserve(size + 1);
  }
  // A pipe has no size, and a file may grow meanwhile: read until the end says so.
  std::size_t filled = 0;
  for (;;) {
    constexpr std::size_t kChunk = std::size_t{1} << 16;
    if (filled == result.text.size()) {
      result.text.resize(std::min(std::max(result.text.capacity(), filled + kChunk),
                                  std::max(max_bytes + 1, filled + 1)));
    }
    const ssize_t got =
        ::read(file.get(), result.text.data() + filled, result.text.size() - filled);
    if (got < 0 && errno == EINTR) continue;
    if (got < 0) return fail("can't be read: " + reason(errno));
    if (got == 0) break;
    filled += static_cast<std::size_t>(got);
    if (filled > max_bytes) return fail("found more than " + size_text(max_bytes) + too_large);
  }
  result.text.resize(filled);
  result.sha256 = sha256_hex(result.text);
  return {std::move(result), {}};
}

}  // namespace tapwright

#include "channel/input_stream.hpp"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <system_error>

#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

std::string reason(int error) { return std::generic_category().message(error); }

std::string size_text(std::size_t bytes) {
  if (bytes >= std::size_t{1} << 20) {
    return significant(static_cast<double>(bytes) / (1 << 20), 4) + " MiB";
  }
  return std::to_string(bytes) + " bytes";
}

}  // namespace

InputStream::InputStream(const std::string& path, std::size_t max_bytes)
    : path_(path), max_bytes_(max_bytes) {
  open();
}

void InputStream::open() {
  if (path_.empty()) return fail("found an empty path; wanted a file");
  if (path_.find('\0') != std::string::npos) return fail("found a zero byte in the path");
  descriptor_ = ::open(path_.c_str(), O_RDONLY | O_CLOEXEC);
  if (descriptor_ < 0) {
    const int error = errno;
    return fail(error == ENOENT ? "no such file" : "can't be opened: " + reason(error));
  }
  struct stat status {};
  if (::fstat(descriptor_, &status) != 0) return fail("can't be read: " + reason(errno));
  if (S_ISDIR(status.st_mode)) return fail("found a directory; wanted a file");
  if (S_ISREG(status.st_mode)) {
    size_ = static_cast<std::size_t>(status.st_size);
    if (*size_ > max_bytes_) {
      fail("found a file of " + size_text(*size_) + "; at most " + size_text(max_bytes_) +
           " are read");
    }
  }
}

InputStream::~InputStream() {
  if (descriptor_ >= 0) ::close(descriptor_);
}

void InputStream::fail(std::string message) { failure_ = error_at(path_, 0, std::move(message)); }

std::size_t InputStream::read(char* target, std::size_t count) {
  if (failure_) return 0;
  ssize_t got = 0;
  do {
    got = ::read(descriptor_, target, count);
  } while (got < 0 && errno == EINTR);
  if (got < 0) {
    fail("can't be read: " + reason(errno));
    return 0;
  }
  total_ += static_cast<std::size_t>(got);
  if (total_ > max_bytes_) {  // a pipe, or a file that grows
    fail("found more than " + size_text(max_bytes_) + "; at most " + size_text(max_bytes_) +
         " are read");
    return 0;
  }
  return static_cast<std::size_t>(got);
}

}  // namespace tapwright

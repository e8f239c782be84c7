#include "tapwright/report/record_file.hpp"

#include <fcntl.h>
#include <sys/file.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <filesystem>
#include <utility>

#include "tapwright/report/output_file.hpp"

namespace tapwright {
namespace {

constexpr std::size_t kChunk = std::size_t{1} << 16;
constexpr std::size_t kLongestLine = std::size_t{1} << 24;

/// Writes all bytes; errno of the failure, or 0.
int write_all(int descriptor, std::string_view bytes) {
  while (!bytes.empty()) {
    const ssize_t n = ::write(descriptor, bytes.data(), bytes.size());
    if (n < 0 && errno != EINTR) return errno;
    if (n > 0) bytes.remove_prefix(static_cast<std::size_t>(n));
  }
  return 0;
}

/// Length of the file up to its last line feed; empty after a failure.
std::optional<off_t> whole_lines(int descriptor) {
  struct stat found{};
  if (::fstat(descriptor, &found) != 0) return std::nullopt;
  std::string chunk(kChunk, '\0');
  for (off_t end = found.st_size; end > 0;) {
    const off_t begin = std::max<off_t>(0, end - static_cast<off_t>(kChunk));
    const ssize_t n = ::pread(descriptor, chunk.data(), static_cast<std::size_t>(end - begin), begin);
    if (n < 0) return std::nullopt;
    const std::size_t at = std::string_view(chunk.data(), static_cast<std::size_t>(n)).rfind('\n');
    if (at != std::string_view::npos) return begin + static_cast<off_t>(at) + 1;
    end = begin;
  }
  return 0;
}

}  // namespace

Diagnostic RecordFile::problem(const std::string& what) const { return error_at(path_, 0, what); }

Result<RecordFile> RecordFile::open(const std::string& path, std::string_view first_line) {
  struct stat found{};
  if (::stat(path.c_str(), &found) != 0 || (S_ISREG(found.st_mode) && found.st_size == 0)) {
    if (auto failed = write_output(path, std::string(first_line) + "\n")) {
      return failure<RecordFile>(std::move(*failed));
    }
  }
  RecordFile file(::open(path.c_str(), O_RDWR | O_APPEND | O_CLOEXEC), path);
  if (file.descriptor_ < 0) return failure<RecordFile>(file.problem(std::strerror(errno)));
  if (::fstat(file.descriptor_, &found) != 0 || !S_ISREG(found.st_mode)) {
    return failure<RecordFile>(file.problem("is no regular file"));
  }
  if (::flock(file.descriptor_, LOCK_EX | LOCK_NB) != 0) {
    return failure<RecordFile>(file.problem("another run is adding to it"));
  }
  return {std::move(file), {}};
}

Result<RecordFile> RecordFile::open_to_read(const std::string& path) {
  RecordFile file(::open(path.c_str(), O_RDONLY | O_CLOEXEC), path);
  struct stat found{};
  if (file.descriptor_ < 0) return failure<RecordFile>(file.problem(std::strerror(errno)));
  if (::fstat(file.descriptor_, &found) != 0 || !S_ISREG(found.st_mode)) {
    return failure<RecordFile>(file.problem("is no regular file"));
  }
  return {std::move(file), {}};
}

Result<RecordFile> RecordFile::temporary(std::string_view first_line) {
  std::error_code none;
  const std::filesystem::path folder = std::filesystem::temp_directory_path(none);
  std::string name = ((none ? "/tmp" : folder) / "tapwright.XXXXXX").string();
  RecordFile file(::mkostemp(name.data(), O_APPEND | O_CLOEXEC), "");
  if (file.descriptor_ < 0) {
    return failure<RecordFile>(error_at(name, 0, std::string("can't be written: ") + std::strerror(errno)));
  }
  ::unlink(name.c_str());
  if (auto failed = file.append(std::string(first_line))) {
    return failure<RecordFile>(std::move(*failed));
  }
  return {std::move(file), {}};
}

RecordFile::RecordFile(RecordFile&& other) noexcept
    : descriptor_(std::exchange(other.descriptor_, -1)), path_(std::move(other.path_)) {}

RecordFile& RecordFile::operator=(RecordFile&& other) noexcept {
  std::swap(descriptor_, other.descriptor_);
  std::swap(path_, other.path_);
  return *this;
}

RecordFile::~RecordFile() {
  if (descriptor_ >= 0) ::close(descriptor_);
}

std::optional<Diagnostic> RecordFile::append(std::string line) {
  line += '\n';
  const auto whole = whole_lines(descriptor_);
  if (!whole || ::ftruncate(descriptor_, *whole) != 0) return problem(std::strerror(errno));
  if (const int failed = write_all(descriptor_, line); failed != 0) {
    // Leaves the line out rather than torn; when even that fails, the next run cuts it off.
    if (::ftruncate(descriptor_, *whole) != 0) return problem("can't be written or mended");
    return problem(std::string("can't be written: ") + std::strerror(failed));
  }
  return std::nullopt;
}

std::optional<Diagnostic> RecordFile::sync() {
  if (::fsync(descriptor_) != 0 && errno != EINVAL) return problem(std::strerror(errno));
  return std::nullopt;
}

std::optional<std::string> LineReader::next() {
  for (;;) {
    const std::size_t feed = buffer_.find('\n', at_);
    if (feed != std::string::npos) {
      std::string line = buffer_.substr(at_, feed - at_);
      at_ = feed + 1;
      ++number_;
      return line;
    }
    buffer_.erase(0, at_);
    at_ = 0;
    if (buffer_.size() > kLongestLine) return std::nullopt;
    const std::size_t kept = buffer_.size();
    buffer_.resize(kept + kChunk);
    const ssize_t n = ::pread(file_->descriptor_, buffer_.data() + kept, kChunk, offset_);
    buffer_.resize(kept + static_cast<std::size_t>(std::max<ssize_t>(n, 0)));
    if (n <= 0) return std::nullopt;
    offset_ += n;
  }
}

}  // namespace tapwright

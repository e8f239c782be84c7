#include "tapwright/report/output_file.hpp"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <filesystem>

namespace tapwright {
namespace {

std::string folder_of(const std::string& path) {
  const std::size_t slash = path.rfind('/');
  if (slash == std::string::npos) return ".";
  return slash == 0 ? "/" : path.substr(0, slash);
}

Diagnostic problem(const std::string& path, const std::string& what) {
  return error_at(path, 0, "can't be written: " + what);
}

/// Writes all bytes to the descriptor; errno of the failure, or 0.
int write_all(int descriptor, std::string_view bytes) {
  while (!bytes.empty()) {
    const ssize_t n = ::write(descriptor, bytes.data(), bytes.size());
    if (n < 0) {
      if (errno == EINTR) continue;
      return errno;
    }
    bytes.remove_prefix(static_cast<std::size_t>(n));
  }
  return 0;
}

}  // namespace

std::optional<Diagnostic> check_output(const std::string& path) {
  if (path == "-") return std::nullopt;
  if (path.empty()) return error_at("", 0, "an output file needs a name");
  struct stat found{};
  if (::stat(path.c_str(), &found) == 0) {
    if (S_ISDIR(found.st_mode)) return problem(path, "a directory is in the way");
    if (::access(path.c_str(), W_OK) != 0) return problem(path, std::strerror(errno));
    if (!S_ISREG(found.st_mode)) return std::nullopt;
  } else if (errno != ENOENT) {
    return problem(path, std::strerror(errno));
  }
  const std::string folder = folder_of(path);
  if (::stat(folder.c_str(), &found) != 0) {
    return problem(path, "there is no directory " + folder);
  }
  if (!S_ISDIR(found.st_mode)) return problem(path, folder + " is not a directory");
  if (::access(folder.c_str(), W_OK | X_OK) != 0) {
    return problem(path, "directory " + folder + ": " + std::strerror(errno));
  }
  return std::nullopt;
}

std::optional<Diagnostic> write_output(const std::string& path, std::string_view bytes) {
  return write_output(path, [&](const Sink& sink) {
    sink(bytes);
    return std::optional<Diagnostic>();
  });
}

std::optional<Diagnostic> write_output(
    const std::string& path, const std::function<std::optional<Diagnostic>(const Sink&)>& fill) {
  if (auto blocked = check_output(path)) return blocked;
  struct stat found{};
  const bool exists = ::stat(path.c_str(), &found) == 0;
  const bool direct = exists && !S_ISREG(found.st_mode);
  // A name that is a link keeps being one: what it points at is replaced.
  const std::string target = exists && !direct ? std::filesystem::canonical(path).string() : path;
  std::string temporary = target + ".XXXXXX";
  const int descriptor = direct ? ::open(path.c_str(), O_WRONLY | O_CLOEXEC)
                                : ::mkostemp(temporary.data(), O_CLOEXEC);
  if (descriptor < 0) return problem(path, std::strerror(errno));
  int failed = 0;
  if (!direct) {
    // mkostemp makes files private; a result is as readable as the one it replaces, or as the
    // user's mask allows.
    const mode_t mask = ::umask(0);
    ::umask(mask);
    failed = ::fchmod(descriptor, exists ? found.st_mode & 07777 : 0666 & ~mask) == 0 ? 0 : errno;
  }
  const Sink sink = [&](std::string_view bytes) {
    if (failed == 0) failed = write_all(descriptor, bytes);
  };
  std::optional<Diagnostic> refused = fill(sink);
  if (!direct && failed == 0 && ::fsync(descriptor) != 0) failed = errno;
  if (::close(descriptor) != 0 && failed == 0) failed = errno;
  if (!direct && !refused && failed == 0 && ::rename(temporary.c_str(), target.c_str()) != 0) {
    failed = errno;
  }
  if (!direct && (refused || failed != 0)) ::unlink(temporary.c_str());
  if (refused) return refused;
  if (failed != 0) return problem(path, std::strerror(failed));
  return std::nullopt;
}

}  // namespace tapwright

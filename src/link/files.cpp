#include "link/files.hpp"

#include <algorithm>
#include <filesystem>

#include "tapwright/base/text.hpp"

namespace tapwright {

std::string InputFiles::resolved(const std::string& name) const {
  return (std::filesystem::path(base_) / std::filesystem::path(name)).string();
}

InputFiles InputFiles::fresh() const {
  InputFiles other = *this;
  other.used_.clear();
  return other;
}

bool InputFiles::are_unchanged(const std::vector<InputFile>& files) {
  for (const InputFile& file : files) {
    if (file_sha256(file.path).value != file.sha256) return false;
  }
  for (const InputFile& file : files) add(file);
  return true;
}

void InputFiles::add(InputFile file) {
  const bool known = std::any_of(used_.begin(), used_.end(),
                                 [&](const InputFile& one) { return one.path == file.path; });
  if (!known) used_.push_back(std::move(file));
}

void InputFiles::add_ports(const std::string& path, const PortMap& ports) {
  for (InputFile& file : used_) {
    if (file.path == path) file.ports = ports;
  }
}

std::optional<std::string> InputFiles::read(const Section& name) {
  const std::string path = resolved(name.text());
  Result<TextFile> file = read_text_file(path);
  if (!file) {
    for (const Diagnostic& note : file.notes)
      name.error(shown_text(name.text()) + ": " + note.message);
    return std::nullopt;
  }
  add({path, file.value->sha256, {}});
  return std::move(file.value->text);
}

}  // namespace tapwright

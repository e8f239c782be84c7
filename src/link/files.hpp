#pragma once
// Every file a link names is opened here, so that a result can name its input.

#include <optional>
#include <string>
#include <vector>

#include "link/section.hpp"
#include "tapwright/channel/text_file.hpp"
#include "tapwright/link/link.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {

class InputFiles {
 public:
  /// `cache` may be null; otherwise it outlives this.
  InputFiles(std::string base_directory, LinkCache* cache)
      : base_(std::move(base_directory)), cache_(cache != nullptr ? &cache->kept() : nullptr) {}
  /// The same folder and cache, with no file used yet.
  [[nodiscard]] InputFiles fresh() const;

  /// The path to open for a name found in the link file.
  [[nodiscard]] std::string resolved(const std::string& name) const;
  /// Reads the file named by `name` (a text); a note at its place when that fails.
  [[nodiscard]] std::optional<std::string> read(const Section& name);
  void add(InputFile file);
  /// Remembers between which ports a file that was added is on the way to the receiver.
  void add_ports(const std::string& path, const PortMap& ports);
  /// Reads the files again; true, and they count as used, when their bytes are still the same.
  [[nodiscard]] bool are_unchanged(const std::vector<InputFile>& files);
  [[nodiscard]] LinkCache::Kept* cache() const { return cache_; }
  [[nodiscard]] const std::vector<InputFile>& used() const { return used_; }

 private:
  std::string base_;
  LinkCache::Kept* cache_;
  std::vector<InputFile> used_;
};

}  // namespace tapwright

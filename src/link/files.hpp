#pragma once
// Every file a link names is opened here, so that a result can name its input.

#include <string>
#include <vector>

#include "link/section.hpp"
#include "tapwright/channel/text_file.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright {

class InputFiles {
 public:
  explicit InputFiles(std::string base_directory) : base_(std::move(base_directory)) {}

  /// The path to open for a name found in the link file.
  [[nodiscard]] std::string resolved(const std::string& name) const;
  /// Reads the file named by `name` (a text); a note at its place when that fails.
  [[nodiscard]] std::optional<std::string> read(const Section& name);
  void add(InputFile file);
  [[nodiscard]] const std::vector<InputFile>& used() const { return used_; }

 private:
  std::string base_;
  std::vector<InputFile> used_;
};

}  // namespace tapwright

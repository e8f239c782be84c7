#pragma once
// A link as text, so that it can be built again with something changed.

#include <memory>
#include <string>
#include <vector>

#include "tapwright/link/read_link.hpp"

namespace tapwright {

struct LinkSource {
  std::string text;
  std::string file_name;       ///< labels the notes
  std::string base_directory;  ///< where relative names count from
  std::vector<LinkChange> changes;
  /// Shared by the copies: what was read once is not read again.
  std::shared_ptr<LinkCache> cache = std::make_shared<LinkCache>();
};

/// The link with `more` applied after the source's own changes. Errors: as parse_link.
[[nodiscard]] Result<Link> read_link(const LinkSource& source,
                                     const std::vector<LinkChange>& more = {});

}  // namespace tapwright

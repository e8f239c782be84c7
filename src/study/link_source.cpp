#include "tapwright/study/link_source.hpp"

namespace tapwright {

Result<Link> read_link(const LinkSource& source, const std::vector<LinkChange>& more) {
  std::vector<LinkChange> changes = source.changes;
  changes.insert(changes.end(), more.begin(), more.end());
  return parse_link(source.text, source.file_name, source.base_directory, changes,
                    source.cache.get());
}

}  // namespace tapwright

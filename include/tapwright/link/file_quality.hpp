#pragma once
// How far the Touchstone files of a link can be trusted.

#include <string>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/quality.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright {

struct FileQuality {
  std::string path;
  PortMap ports;
  DataQuality data;
  PathQuality through;
};

/// Reads again each Touchstone file on the way from driver to receiver (fixtures too, crosstalk
/// not) and measures it at the link's symbol rate, as the file has it: before any repair.
///
/// A file of fewer than 8 points or one that can be read only once (a pipe) is left out.
///
/// Errors: a file that has gone or changed its bytes.
[[nodiscard]] Result<std::vector<FileQuality>> measure_files(const Link& link);

}  // namespace tapwright

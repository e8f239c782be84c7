#pragma once
// Files are written whole or not at all.

#include <functional>
#include <optional>
#include <string>
#include <string_view>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// Whether `path` could be written, asked before the long work: its folder is there and may be
/// written to, and no directory or unwritable file is in the way. "-" always can.
[[nodiscard]] std::optional<Diagnostic> check_output(const std::string& path);

/// Writes `bytes` beside `path` under a temporary name, syncs, and renames; an older file stays as
/// it was unless all went well. A path that is no regular file (a pipe, a device) is written
/// directly.
///
/// Errors: the reason, naming the path; nothing is left behind.
[[nodiscard]] std::optional<Diagnostic> write_output(const std::string& path,
                                                     std::string_view bytes);

/// Takes bytes in pieces.
using Sink = std::function<void(std::string_view)>;

/// The same for bytes that come in pieces, too many to be kept; `fill` gives them to the sink. What
/// `fill` answers is told, and leaves the older file as it was.
[[nodiscard]] std::optional<Diagnostic> write_output(
    const std::string& path, const std::function<std::optional<Diagnostic>(const Sink&)>& fill);

}  // namespace tapwright

#pragma once
// Touchstone files, versions 1.1 and 2.0.

#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

/// N of a name that ends in `.sNp`, in either case; empty for any other name.
[[nodiscard]] std::optional<int> ports_from_file_name(std::string_view file_name);

/// Parses Touchstone text; opens nothing. `file_name` labels the notes, and its extension gives the
/// number of ports unless `num_ports` does or the text is version 2. With neither, the number comes
/// from the layout of the first point, and a warning says so.
///
/// Whatever the file holds (S, Y, Z, H, G; mixed mode), the result is single-ended S in the file's
/// references, with decimal frequencies converted exactly. Noise parameters are checked and left
/// out.
///
/// Errors: notes with line, found and wanted, up to twenty; never an exception.
/// Source: Touchstone File Format Specification 1.1 (EIA/IBIS Open Forum, 2002) and 2.0 (2009).
[[nodiscard]] Result<Network> parse_touchstone(std::string_view text, std::string_view file_name,
                                               std::optional<int> num_ports = std::nullopt);

struct TouchstoneFile {
  Network network;
  std::string sha256;  ///< of the file's bytes, 64 lower-case hexadecimal digits
};

/// Reads and parses a file piece by piece, so that its text is never whole in memory.
///
/// Errors: those of read_text_file and parse_touchstone.
[[nodiscard]] Result<TouchstoneFile> read_touchstone(const std::string& path,
                                                     std::optional<int> num_ports = std::nullopt);

struct TouchstoneOptions {
  enum class Format { kRealImaginary, kMagnitudeAngle, kDecibelAngle };
  enum class Unit { kHz, kKhz, kMhz, kGhz };
  Format format = Format::kRealImaginary;  ///< the one that reads back bit for bit
  Unit unit = Unit::kHz;
  /// 1 or 2; empty = 1 where all references are equal, otherwise 2.
  std::optional<int> version;
  std::vector<std::string> comments;  ///< written at the top, one a line, without the '!'
};

/// The network as Touchstone text. With kRealImaginary, reading it back gives the same doubles, in
/// any unit.
///
/// Errors: std::invalid_argument if a reference is complex, or if references differ in version 1.
[[nodiscard]] std::string write_touchstone(const Network& network,
                                           const TouchstoneOptions& options = {});

}  // namespace tapwright

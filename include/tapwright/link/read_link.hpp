#pragma once
// From a link file to a complete and valid link.

#include <cstddef>
#include <memory>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright {

/// A value put in place of one in the link file, before it is checked.
struct LinkChange {
  std::string path;   ///< such as `channel.line.length_m` or `transmitter.fir[0].min`
  std::string value;  ///< as JSON: `3.5`, `"8b10b"`, `{"length_m": 2, ...}`
};

/// What was read and computed for earlier links, kept for later ones that share it: a study that
/// varies one key reads all others again and again. It never changes a result (files are compared
/// by digest), holds the records used last, and may be used by several threads at once.
class LinkCache {
 public:
  explicit LinkCache(std::size_t max_records = 16);
  LinkCache(const LinkCache&) = delete;
  LinkCache& operator=(const LinkCache&) = delete;
  ~LinkCache();

  struct Kept;
  [[nodiscard]] Kept& kept() { return *kept_; }

 private:
  std::unique_ptr<Kept> kept_;
};

/// Reads a link file with all that it names. Keys of a device file stand in for the link's own.
///
/// Relative names count from the folder of the file that holds them. Every file read is listed in
/// Link::inputs, the link file first.
///
/// Errors: up to twenty notes with file, line, the path of the key, what is wrong and what is
///         allowed. Warnings come beside the link and inside it.
[[nodiscard]] Result<Link> read_link(const std::string& path,
                                     const std::vector<LinkChange>& changes = {},
                                     LinkCache* cache = nullptr);

/// The same from text. `file_name` labels the notes, `base_directory` is where relative names count
/// from (empty: the working directory).
[[nodiscard]] Result<Link> parse_link(std::string_view text, const std::string& file_name,
                                      const std::string& base_directory,
                                      const std::vector<LinkChange>& changes = {},
                                      LinkCache* cache = nullptr);

/// A number in a link file that the outside world sets: a length, a noise, an impedance.
struct LinkNumber {
  std::string path;
  double value = 0.0;  ///< in the key's unit
  std::string unit;    ///< as the schema has it; may be empty
  std::string title;   ///< a name for people, such as "receiver noise density"
  double step = 0.0;   ///< a change worth looking at: 5 % of the value unless the schema has one
};

/// The numbers of the link (defaults included) that a sensitivity study may vary, by path.
///
/// Errors: as parse_link, as far as the text itself goes; files that it names are not opened,
///         except a device file.
[[nodiscard]] Result<std::vector<LinkNumber>> numbers_in_link(
    std::string_view text, const std::string& file_name, const std::string& base_directory,
    const std::vector<LinkChange>& changes = {});

/// The JSON Schema (draft 2020-12) of link files; device files follow `#/$defs/device_file`.
[[nodiscard]] std::string link_schema();

/// A link file with comments, to start from; reads and solves as it is and names no other file.
[[nodiscard]] std::string example_link();

}  // namespace tapwright

#include "tapwright/link/file_quality.hpp"

#include <filesystem>

#include "tapwright/channel/touchstone.hpp"

namespace tapwright {

Result<std::vector<FileQuality>> measure_files(const Link& link) {
  std::vector<FileQuality> all;
  std::vector<Diagnostic> notes;
  const auto add = [&](std::vector<Diagnostic> more) {
    notes.insert(notes.end(), more.begin(), more.end());
  };
  for (const InputFile& input : link.inputs) {
    if (!input.ports || !std::filesystem::is_regular_file(input.path)) continue;
    Result<TouchstoneFile> file = read_touchstone(input.path);
    // What the reader warned of stands in the link's own warnings.
    if (!file) {
      add(std::move(file.notes));
      continue;
    }
    if (file.value->sha256 != input.sha256) {
      add({error_at(input.path, 0, "the file has changed since the link was read")});
      continue;
    }
    const Network& network = file.value->network;
    if (network.num_points() < 8) continue;
    Result<PathQuality> through =
        measure_path(network, *input.ports, link.signal.symbol_rate_bd, input.path);
    if (!through) {
      add(std::move(through.notes));
      continue;
    }
    all.push_back({input.path, *input.ports, measure_data(network), std::move(*through.value)});
  }
  if (has_error(notes)) return {std::nullopt, std::move(notes)};
  return {std::move(all), std::move(notes)};
}

}  // namespace tapwright

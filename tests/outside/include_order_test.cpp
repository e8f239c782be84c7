// The architecture as a test: includes flow one way through the rooms, and the libraries that are
// the program's own business stay out of the public headers.

#include <gtest/gtest.h>

#include <algorithm>
#include <filesystem>
#include <fstream>
#include <regex>
#include <string>
#include <vector>

namespace {

namespace fs = std::filesystem;

const std::vector<std::string> kRooms = {"base", "channel", "equalizer", "link", "eye",
                                         "search", "study", "report", "cli"};

struct Include {
  std::string place;  ///< file:line
  int room;           ///< of the including file
  std::string header;
  bool is_public;  ///< the including file stands in include/
};

int room_index(const std::string& name) {
  const auto found = std::find(kRooms.begin(), kRooms.end(), name);
  return found == kRooms.end() ? -1 : static_cast<int>(found - kRooms.begin());
}

std::vector<Include> includes_below(const fs::path& folder, bool is_public) {
  static const std::regex kInclude(R"(^\s*#\s*include\s*[<"]([^>"]+)[>"])");
  std::vector<Include> found;
  for (const fs::directory_entry& entry : fs::recursive_directory_iterator(folder)) {
    const std::string extension = entry.path().extension().string();
    if (extension != ".hpp" && extension != ".cpp") continue;
    const std::string room = fs::relative(entry.path(), folder).begin()->string();
    std::ifstream file(entry.path());
    std::string line;
    for (int number = 1; std::getline(file, line); ++number) {
      std::smatch match;
      if (!std::regex_search(line, match, kInclude)) continue;
      found.push_back({entry.path().string() + ":" + std::to_string(number), room_index(room),
                       match[1].str(), is_public});
    }
  }
  return found;
}

std::vector<Include> all_includes() {
  const fs::path top = TAPWRIGHT_SOURCE_DIR;
  std::vector<Include> all = includes_below(top / "include" / "tapwright", true);
  const std::vector<Include> sources = includes_below(top / "src", false);
  all.insert(all.end(), sources.begin(), sources.end());
  return all;
}

/// Room of a project header, -1 for any other: "tapwright/<room>/x.hpp" or "<room>/x.hpp".
int room_of_header(std::string header) {
  const std::string prefix = "tapwright/";
  if (header.starts_with(prefix)) header.erase(0, prefix.size());
  return room_index(header.substr(0, header.find('/')));
}

TEST(IncludeOrder, FlowsOneWayThroughTheRooms) {
  const std::vector<Include> all = all_includes();
  int num_between_rooms = 0;
  for (const Include& include : all) {
    // The umbrella headers of the library, if any, belong to no room and may name all.
    if (include.room < 0) continue;
    const int target = room_of_header(include.header);
    if (target < 0) continue;
    num_between_rooms += target != include.room;
    EXPECT_LE(target, include.room) << include.place << ": a file in "
                                    << kRooms[static_cast<std::size_t>(include.room)]
                                    << " may not include " << include.header;
  }
  EXPECT_GT(num_between_rooms, 10) << "the reader of #include lines found next to nothing";
}

TEST(IncludeOrder, KeepsSolverOptionsAndJsonOutOfPublicHeaders) {
  for (const Include& include : all_includes()) {
    if (!include.is_public) continue;
    for (const char* library : {"nlopt", "CLI/", "CLI11", "nlohmann", "openssl", "boost"}) {
      EXPECT_EQ(include.header.find(library), std::string::npos)
          << include.place << " shows " << include.header;
    }
  }
}

TEST(IncludeOrder, PublicHeadersIncludeOnlyPublicHeaders) {
  for (const Include& include : all_includes()) {
    if (!include.is_public || room_of_header(include.header) < 0) continue;
    EXPECT_TRUE(include.header.starts_with("tapwright/")) << include.place;
  }
}

}  // namespace

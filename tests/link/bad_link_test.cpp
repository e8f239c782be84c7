// Each file in tests/bad/link is refused with the notes in its .expect, written by hand.

#include <gtest/gtest.h>

#include "support/input_files.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {
namespace {

class BadLink : public testing::TestWithParam<std::string> {};

TEST_P(BadLink, IsRefusedWithItsNotes) {
  const std::string folder = TAPWRIGHT_SOURCE_DIR "/tests/bad/link/";
  const std::string text = test::bytes_of(folder + GetParam());
  const Result<Link> link = parse_link(text, GetParam(), folder);
  std::string notes;
  for (Diagnostic note : link.notes) {
    if (note.file.starts_with(folder)) note.file.erase(0, folder.size());
    notes += to_string(note) + "\n";
  }
  EXPECT_EQ(notes, test::bytes_of(folder + GetParam() + ".expect"));
  EXPECT_FALSE(link);
}

INSTANTIATE_TEST_SUITE_P(Files, BadLink,
                         testing::ValuesIn(test::files_with_expectation("tests/bad/link")),
                         [](const auto& file) { return test::test_name_of(file.param); });

}  // namespace
}  // namespace tapwright

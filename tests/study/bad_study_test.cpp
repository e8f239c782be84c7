// Each file in tests/bad/study is refused with the notes in its .expect, written by hand.

#include <gtest/gtest.h>

#include "support/input_files.hpp"
#include "tapwright/study/study_file.hpp"

namespace tapwright {
namespace {

class BadStudy : public testing::TestWithParam<std::string> {};

TEST_P(BadStudy, IsRefusedWithItsNotes) {
  const std::string folder = TAPWRIGHT_SOURCE_DIR "/tests/bad/study";
  const std::string text = test::bytes_of(folder + "/" + GetParam());
  const Result<Study> study = parse_study(text, GetParam(), folder);
  std::string notes;
  for (const Diagnostic& note : study.notes) {
    std::string line = to_string(note);
    for (std::size_t at = 0; (at = line.find(folder + "/", at)) != std::string::npos;) {
      line.erase(at, folder.size() + 1);
    }
    if (const auto at = line.find(folder); at != std::string::npos) {
      line.replace(at, folder.size(), "FOLDER");
    }
    notes += line + "\n";
  }
  EXPECT_EQ(notes, test::bytes_of(folder + "/" + GetParam() + ".expect"));
  EXPECT_FALSE(study);
}

INSTANTIATE_TEST_SUITE_P(Files, BadStudy,
                         testing::ValuesIn(test::files_with_expectation("tests/bad/study")),
                         [](const auto& file) { return test::test_name_of(file.param); });

}  // namespace
}  // namespace tapwright

#include "tapwright/base/text.hpp"

#include <gtest/gtest.h>

namespace tapwright {
namespace {

TEST(Text, ReadsAWholeFiniteNumberAndNothingElse) {
  EXPECT_EQ(parse_number("1.5"), 1.5);
  EXPECT_EQ(parse_number("+2e3"), 2000.0);
  EXPECT_EQ(parse_number("1e-400"), 0.0);
  for (const char* bad : {"", "1,5", "nan", "inf", "1e400", "1.5x", " 1", "+-1"}) {
    EXPECT_FALSE(parse_number(bad)) << bad;
  }
}

TEST(Text, WritesNumbersThatReadBackExactly) {
  for (const double value : {0.1, -1e-300, 123456789.125, 5e-324}) {
    EXPECT_EQ(parse_number(exact(value)), value);
  }
  EXPECT_EQ(fixed(-0.04, 1), "0.0");
  EXPECT_EQ(fixed(2.25, 1), "2.2");
}

TEST(Text, ShowsHostileTextHarmlessly) {
  EXPECT_EQ(shown_text("a\x1b[31m\n"), "\"a\\x1b[31m\\x0a\"");
  EXPECT_EQ(shown_text("\xff\xc3\xa9"), "\"\\xff\xc3\xa9\"");
  EXPECT_LT(shown_text(std::string(10000, 'x')).size(), 80u);
}

TEST(Text, FindsTheWordThatWasMeant) {
  EXPECT_EQ(nearest_word("taps_v", {"tap_v", "noise"}), "tap_v");
  EXPECT_FALSE(nearest_word("zzzzzz", {"taps_v", "noise"}));
}

}  // namespace
}  // namespace tapwright

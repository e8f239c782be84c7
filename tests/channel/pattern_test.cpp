#include "tapwright/channel/pattern.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <string>

namespace tapwright {
namespace {

// checks.md row 9. A maximum-length sequence of order n has period 2^n - 1, 2^(n-1) ones, a longest
// run of n ones and of n - 1 zeros (Golomb's postulates); where ITU-T O.150 inverts (15, 23, 31),
// ones and zeros change places.
struct Case {
  int order;
  bool inverted;
};

class PrbsTest : public testing::TestWithParam<Case> {};

int longest_run(const std::vector<std::uint8_t>& bits, std::uint8_t of) {
  int longest = 0, run = 0;
  for (int turn = 0; turn < 2; ++turn) {  // twice round: a run may wrap
    for (const std::uint8_t bit : bits) {
      run = bit == of ? run + 1 : 0;
      longest = std::max(longest, run);
    }
  }
  return longest;
}

TEST_P(PrbsTest, HasTheCountsOfAMaximumLengthSequence) {
  const auto [order, inverted] = GetParam();
  const std::int64_t length = (std::int64_t{1} << order) - 1;
  EXPECT_EQ(period(Prbs{order}), length);
  const std::vector<std::uint8_t> bits = prbs_bits(order, 0, length);
  const std::int64_t ones = std::count(bits.begin(), bits.end(), std::uint8_t{1});
  EXPECT_EQ(ones, inverted ? length / 2 : length / 2 + 1);
  EXPECT_EQ(longest_run(bits, inverted ? 0 : 1), order);
  EXPECT_EQ(longest_run(bits, inverted ? 1 : 0), order - 1);
  EXPECT_EQ(prbs_bits(order, length, 100), prbs_bits(order, 0, 100));
  // Every window of `order` bits is another one: with the counts above this makes the period full.
  std::vector<bool> seen(static_cast<std::size_t>(length) + 1);
  std::size_t window = 0;
  for (std::int64_t i = 0; i < length + order; ++i) {
    window = ((window << 1) | bits[static_cast<std::size_t>(i % length)]) &
             static_cast<std::size_t>(length);
    if (i < order) continue;
    ASSERT_FALSE(seen[window]) << i;
    seen[window] = true;
  }
}

INSTANTIATE_TEST_SUITE_P(Orders, PrbsTest,
                         testing::Values(Case{7, false}, Case{9, false}, Case{11, false},
                                         Case{13, false}, Case{15, true}, Case{20, false},
                                         Case{23, true}),
                         [](const auto& test) { return std::to_string(test.param.order); });

TEST(Pattern, LongestSequenceHasItsFullPeriod) {
  // 2^31 - 1 is prime (Euler 1772): a map whose power 2^31 - 1 is the identity, but which is not
  // the identity, has that period.
  const std::int64_t length = (std::int64_t{1} << 31) - 1;
  EXPECT_EQ(period(Prbs{31}), length);
  for (const std::int64_t first : {std::int64_t{0}, std::int64_t{1'000'000'007}}) {
    // From the end of one period into the next: the jump and the steps agree.
    const auto across = prbs_bits(31, first + length - 40, 80);
    const auto start = prbs_bits(31, first, 40);
    EXPECT_TRUE(std::equal(start.begin(), start.end(), across.begin() + 40));
  }
  EXPECT_NE(prbs_bits(31, 0, 80), prbs_bits(31, 1, 80));
  // ITU-T O.150: x^31 + x^28 + 1, inverted. Inverting turns a = b xor c into a = b xnor c.
  const auto bits = prbs_bits(31, 12345, 1000);
  for (std::size_t i = 31; i < bits.size(); ++i) {
    EXPECT_EQ(bits[i], 1 ^ bits[i - 31] ^ bits[i - 28]);
  }
}

TEST(Pattern, RecurrencesAreThoseOfTheRecommendation) {
  // ITU-T O.150 (polynomials from memory): x(n) = x(n - a) xor x(n - b).
  for (const auto& [order, other] : {std::pair{9, 5}, {11, 9}, {20, 3}, {7, 6}}) {
    const auto bits = prbs_bits(order, 17, 300);
    for (std::size_t i = static_cast<std::size_t>(order); i < bits.size(); ++i) {
      ASSERT_EQ(bits[i], bits[i - static_cast<std::size_t>(order)] ^
                             bits[i - static_cast<std::size_t>(other)])
          << order;
    }
  }
}

TEST(Pattern, PlaceIsFoundAgainInEveryOrder) {
  for (const int order : {7, 9, 11, 13, 15, 20, 23, 31}) {
    const std::int64_t length = (std::int64_t{1} << order) - 1;
    for (const std::int64_t first : {std::int64_t{0}, std::int64_t{5}, length / 3, length - 1}) {
      EXPECT_EQ(prbs_index(order, prbs_bits(order, first, order + 20)), first) << order;
    }
    auto bits = prbs_bits(order, 3, order + 20);
    bits.back() ^= 1;
    EXPECT_EQ(prbs_index(order, bits), std::nullopt);
  }
}

TEST(Pattern, FourLevelFormIsGrayCodedAndBalanced) {
  const Pattern q = Prbs{13, true};
  EXPECT_EQ(period(q), 8191);
  const Eigen::VectorXd levels = symbols(q, 0, 8191);
  // Two periods of the bits in pairs: each pair of a maximum-length sequence occurs 2^(n-2) times,
  // the pair of zeros once less.
  const auto count = [&](double level) { return ((levels.array() - level).abs() < 1e-9).count(); };
  EXPECT_EQ(count(-1.0), 2047);
  for (const double level : {-1.0 / 3, 1.0 / 3, 1.0}) EXPECT_EQ(count(level), 2048);
  // IEEE 802.3: 00, 01, 11, 10 are 0, 1, 2, 3.
  const auto bits = prbs_bits(13, 0, 200);
  for (std::size_t k = 0; k < 100; ++k) {
    const int high = bits[2 * k], low = bits[2 * k + 1];
    const double want = high == 0 ? (low == 0 ? -1.0 : -1.0 / 3) : (low == 1 ? 1.0 / 3 : 1.0);
    EXPECT_DOUBLE_EQ(levels[static_cast<Eigen::Index>(k)], want);
  }
  EXPECT_EQ(symbols(q, 8191, 50), symbols(q, 0, 50));
}

TEST(Pattern, ListRepeatsInBothDirections) {
  const Pattern list = SymbolList{{1.0, -1.0, 0.5}};
  EXPECT_EQ(symbols(list, -2, 6),
            (Eigen::VectorXd(6) << -1.0, 0.5, 1.0, -1.0, 0.5, 1.0).finished());
}

TEST(Pattern, NamesAreReadAndSlipsExplained) {
  EXPECT_EQ(std::get<Prbs>(*pattern_named("PRBS31", "x").value), (Prbs{31, false}));
  EXPECT_EQ(std::get<Prbs>(*pattern_named("prbs13q", "x").value), (Prbs{13, true}));
  const Result<Pattern> wrong = pattern_named("prbs-9", "link.json");
  ASSERT_FALSE(wrong);
  EXPECT_EQ(to_string(wrong.notes[0]),
            "link.json: error: found the pattern \"prbs-9\"; wanted prbs7, prbs9, prbs11, prbs13, "
            "prbs15, prbs20, prbs23, prbs31, prbs13q or a list of symbols; did you mean prbs9?");
  EXPECT_THROW((void)period(Prbs{8}), std::invalid_argument);
  EXPECT_THROW((void)period(SymbolList{}), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

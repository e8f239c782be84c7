#include "tapwright/eye/line_code.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <map>
#include <random>
#include <set>
#include <string>
#include <utility>
#include <vector>

namespace tapwright {
namespace {

std::string bits(const Character8b10b& character) {
  std::string out;
  for (const bool bit : character.bits) out += bit ? '1' : '0';
  return out;
}
std::uint8_t byte(int x, int y) { return static_cast<std::uint8_t>(x + 32 * y); }
std::vector<std::pair<std::uint8_t, bool>> all_characters() {
  std::vector<std::pair<std::uint8_t, bool>> out;
  for (int b = 0; b < 256; ++b) out.push_back({static_cast<std::uint8_t>(b), false});
  for (int y = 0; y < 8; ++y) out.push_back({byte(28, y), true});
  for (const int x : {23, 27, 29, 30}) out.push_back({byte(x, 7), true});
  return out;
}

// Source: IEEE 802.3 tables 36-1 and 36-2 (checks.md row 7; from memory).
TEST(Code8b10b, SendsThePublishedCharacters) {
  EXPECT_EQ(bits(encode_8b10b(byte(28, 5), true, -1)), "0011111010");
  EXPECT_EQ(bits(encode_8b10b(byte(28, 5), true, 1)), "1100000101");
  EXPECT_EQ(bits(encode_8b10b(byte(21, 5), false, -1)), "1010101010");
  EXPECT_EQ(bits(encode_8b10b(byte(21, 5), false, 1)), "1010101010");
  EXPECT_EQ(bits(encode_8b10b(byte(10, 2), false, -1)), "0101010101");
  EXPECT_EQ(bits(encode_8b10b(byte(16, 2), false, -1)), "0110110101");
  EXPECT_EQ(bits(encode_8b10b(byte(16, 2), false, 1)), "1001000101");
  EXPECT_EQ(bits(encode_8b10b(byte(17, 7), false, -1)), "1000110111");
  EXPECT_EQ(bits(encode_8b10b(byte(11, 7), false, 1)), "1101001000");
  EXPECT_EQ(name_8b10b(byte(16, 2), false), "D16.2");
  EXPECT_EQ(name_8b10b(0xBC, true), "K28.5");
}

// Source: the code's own definition (Widmer and Franaszek 1983): characters of 4, 5 or 6 ones; the
// disparity changes exactly with an unbalanced character and so stays -1 or +1; no two characters
// of one disparity are alike, and no character stands for two bytes at either disparity.
TEST(Code8b10b, BalancesEveryCharacterAndKeepsThemApart) {
  std::map<std::string, std::pair<int, bool>> meaning;
  for (const int disparity : {-1, 1}) {
    std::set<std::string> seen;
    for (const auto& [b, control] : all_characters()) {
      const Character8b10b sent = encode_8b10b(b, control, disparity);
      int ones = 0;
      for (const bool bit : sent.bits) ones += bit;
      EXPECT_TRUE(ones >= 4 && ones <= 6) << name_8b10b(b, control);
      EXPECT_EQ(sent.disparity, disparity + 2 * ones - 10) << name_8b10b(b, control);
      EXPECT_TRUE(sent.disparity == -1 || sent.disparity == 1) << name_8b10b(b, control);
      EXPECT_TRUE(seen.insert(bits(sent)).second) << name_8b10b(b, control);
      const auto [it, fresh] = meaning.insert({bits(sent), {b, control}});
      EXPECT_TRUE(fresh || (it->second.first == b && it->second.second == control))
          << bits(sent) << " is " << name_8b10b(b, control) << " and something else";
    }
    EXPECT_EQ(seen.size(), 268U);
  }
}

// All pairs of characters reach every run of up to five and every digital sum, because each run of
// six or excursion would begin and end within two characters.
TEST(Code8b10b, KeepsRunsToFiveAndTheDigitalSumWithinThree) {
  int longest = 0;
  int low = 0;
  int high = 0;
  for (const int start : {-1, 1}) {
    for (const auto& [b1, k1] : all_characters()) {
      const Character8b10b first = encode_8b10b(b1, k1, start);
      for (const auto& [b2, k2] : all_characters()) {
        const Character8b10b second = encode_8b10b(b2, k2, first.disparity);
        int sum = start;
        int run = 0;
        bool last = !first.bits[0];
        for (int i = 0; i < 20; ++i) {
          const bool bit = i < 10 ? first.bits[static_cast<std::size_t>(i)]
                                  : second.bits[static_cast<std::size_t>(i - 10)];
          sum += bit ? 1 : -1;
          run = bit == last ? run + 1 : 1;
          last = bit;
          longest = std::max(longest, run);
          low = std::min(low, sum);
          high = std::max(high, sum);
        }
      }
    }
  }
  EXPECT_EQ(longest, 5);
  EXPECT_EQ(low, -3);
  EXPECT_EQ(high, 3);
}

TEST(Code8b10b, RefusesWhatIsNoCharacter) {
  EXPECT_THROW((void)encode_8b10b(byte(21, 5), true, -1), std::invalid_argument);
  EXPECT_THROW((void)encode_8b10b(byte(23, 5), true, -1), std::invalid_argument);
  EXPECT_THROW((void)encode_8b10b(0, false, 0), std::invalid_argument);
}

TEST(Code8b10b, NamesTheCharactersOfAStretch) {
  Eigen::VectorXd levels(30);
  int disparity = 1;
  Eigen::Index at = 0;
  for (const auto& [b, control] : {std::pair{byte(28, 5), true}, std::pair{byte(16, 2), false},
                                   std::pair{byte(11, 7), false}}) {
    const Character8b10b sent = encode_8b10b(b, control, disparity);
    for (const bool bit : sent.bits) levels[at++] = bit ? 1.0 : -1.0;
    disparity = sent.disparity;
  }
  EXPECT_EQ(names_8b10b(levels), (std::vector<std::string>{"K28.5", "D16.2", "D11.7"}));
  EXPECT_TRUE(names_8b10b(levels.head(15)).empty());
  EXPECT_TRUE(names_8b10b(Eigen::VectorXd::Ones(10)).empty());
}

// The trellis and the encoder are two ways to one language: what the trellis can send at each
// state is what the encoder sends at that disparity, character by character.
TEST(LineCode, TheTrellisOf8b10bHoldsExactlyTheEncodersCharacters) {
  const LineCode code = LineCode::code_8b10b();
  for (const int disparity : {-1, 1}) {
    std::set<std::pair<std::string, int>> from_encoder;
    for (const auto& [b, control] : all_characters()) {
      const Character8b10b sent = encode_8b10b(b, control, disparity);
      from_encoder.insert({bits(sent), sent.disparity > 0 ? 1 : 0});
    }
    std::set<std::pair<std::string, int>> from_trellis;
    const auto text = [](const auto& word) {
      std::string out;
      for (const double symbol : word) out += symbol > 0.0 ? '1' : '0';
      return out;
    };
    for (const auto& one : code.sections()[0].branches) {
      if (one.from != (disparity > 0 ? 1 : 0)) continue;
      for (const auto& two : code.sections()[1].branches) {
        if (two.from != one.to) continue;
        for (int i = one.first; i < one.last; ++i) {
          for (int j = two.first; j < two.last; ++j) {
            from_trellis.insert(
                {text(code.sections()[0].words.col(i)) + text(code.sections()[1].words.col(j)),
                 two.to});
          }
        }
      }
    }
    EXPECT_EQ(from_trellis, from_encoder);
  }
}

// Row 8 of the checks, common practice: 10 line bits for 8 data bits. The entropy of a character of
// random data, known the state, is log2 of the number of equally likely characters.
TEST(LineCode, TenLineBitsOf8b10bCarryEightDataBits) {
  const LineCode code = LineCode::code_8b10b();
  double bits_per_character = 0.0;
  for (std::size_t s = 0; s < code.sections().size(); ++s) {
    const LineCode::Section& section = code.sections()[s];
    for (const LineCode::Branch& branch : section.branches) {
      for (int i = branch.first; i < branch.last; ++i) {
        const double p = section.probability[static_cast<std::size_t>(i)];
        if (p > 0.0)
          bits_per_character -= code.state_probability(s)[branch.from] * p * std::log2(p);
      }
    }
  }
  EXPECT_NEAR(bits_per_character, 8.0, 1e-12);  // rounding
  EXPECT_EQ(code.period(), 10);
}

int longest_run(const Eigen::VectorXd& stream) {
  int longest = 0;
  int run = 0;
  for (Eigen::Index i = 0; i < stream.size(); ++i) {
    run = i > 0 && stream[i] == stream[i - 1] ? run + 1 : 1;
    longest = std::max(longest, run);
  }
  return longest;
}

// Source: run limits of the codes: 5 (8b10b), 2 (Manchester), 66 (64b66b, reached by a payload of
// equal symbols between fitting headers, which random data don't send).
TEST(LineCode, RandomStreamsKeepTheRunLengthOfTheirCode) {
  std::mt19937_64 random(1);
  EXPECT_EQ(longest_run(random_stream(LineCode::code_8b10b(), 20000, random)), 5);
  EXPECT_EQ(longest_run(random_stream(LineCode::manchester(), 1000, random)), 2);
  const Eigen::VectorXd stream = random_stream(LineCode::code_64b66b(), 300, random);
  EXPECT_LE(longest_run(stream), 66);
  for (Eigen::Index c = 0; c < 300; ++c) EXPECT_EQ(stream[66 * c], -stream[66 * c + 1]);
}

// Independent: frequencies in the stream. Statistical, 5 sigma of a fair coin at n = 200000 is
// 0.0056; symbols of a balanced code vary less than that.
TEST(LineCode, StreamsOfSymmetricCodesHoldAsManyOnesAsZeros) {
  std::mt19937_64 random(2);
  for (const LineCode& code : {LineCode::none(), LineCode::none(4), LineCode::code_8b10b(),
                               LineCode::code_64b66b(), LineCode::manchester()}) {
    const Eigen::VectorXd stream = random_stream(code, 200000 / code.period() + 1, random);
    EXPECT_NEAR(stream.mean(), 0.0, 0.0112);
  }
}

StateMachine alternate_mark() {
  // "1" alternates between + + and - -, "0" sends + -: two states.
  StateMachine machine;
  machine.num_states = 2;
  machine.edges = {{0, 1, {1.0, 1.0}, 0.5},
                   {0, 0, {1.0, -1.0}, 0.5},
                   {1, 0, {-1.0, -1.0}, 0.25},
                   {1, 1, {1.0, -1.0}, 0.75}};
  return machine;
}

// By hand: pi0 * 0.5 = pi1 * 0.25 and pi0 + pi1 = 1.
TEST(LineCode, AMachineHasItsStationaryProbabilities) {
  const LineCode code = LineCode::machine(alternate_mark());
  EXPECT_NEAR(code.state_probability(0)[0], 1.0 / 3.0, 1e-14);
  EXPECT_NEAR(code.state_probability(0)[1], 2.0 / 3.0, 1e-14);
  EXPECT_FALSE(code.symmetric());
}

template <class Change>
std::string refusal(Change change, int levels = 2) {
  StateMachine machine = alternate_mark();
  change(machine);
  try {
    (void)LineCode::machine(machine, levels);
  } catch (const std::invalid_argument& error) {
    return error.what();
  }
  return "accepted";
}

TEST(LineCode, RefusesABrokenMachineByNamingTheEdgeOrState) {
  EXPECT_EQ(refusal([](auto&) {}), "accepted");
  EXPECT_EQ(refusal([](auto& m) { m.edges.clear(); }), "line code: it has no state or no edge");
  EXPECT_EQ(refusal([](auto& m) { m.edges[2].to = 2; }),
            "line code: edges[2] names state 2 of 0 ... 1");
  EXPECT_EQ(refusal([](auto& m) { m.edges[1].symbols.pop_back(); }),
            "line code: edges[1] sends 1 symbols, edges[0] 2; all words must be equally long");
  EXPECT_EQ(
      refusal([](auto& m) { m.edges[3].symbols[0] = 0.5; }),
      "line code: edges[3] holds the symbol 0.5, which is none of the 2 levels from -1 to +1");
  EXPECT_EQ(refusal([](auto& m) { m.edges[0].probability = -0.5; }),
            "line code: edges[0] has probability -0.5, which is not in 0 ... 1");
  EXPECT_EQ(refusal([](auto& m) { m.edges[0].probability = 0.25; }),
            "line code: the probabilities out of state 0 add up to 0.75; they must make 1");
  EXPECT_EQ(refusal([](auto& m) { m.edges[2].to = 1; }),
            "line code: state 1 never leads back to state 0");
  EXPECT_EQ(refusal([](auto& m) { m.edges[0].to = 0; }),
            "line code: state 1 can't be reached from state 0");
  EXPECT_EQ(refusal([](auto& m) { m.edges[0].symbols.clear(); }),
            "line code: edges[0] sends no symbol");
}

TEST(LineCode, RefusesATwoLevelCodeOnFourLevels) {
  for (const LineCodeKind kind :
       {LineCodeKind::k8b10b, LineCodeKind::k64b66b, LineCodeKind::kManchester}) {
    EXPECT_THROW((void)LineCode::from({kind, {}}, 4), std::invalid_argument);
    EXPECT_EQ(LineCode::from({kind, {}}, 2).levels(), 2);
  }
  EXPECT_EQ(LineCode::from({}, 4).sections()[0].words.cols(), 4);
}

}  // namespace
}  // namespace tapwright

#include "tapwright/eye/coded_worst_case.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <limits>
#include <random>
#include <set>
#include <vector>

#include "support/python.hpp"

namespace tapwright {
namespace {

constexpr double kEps = std::numeric_limits<double>::epsilon();

double uniform(std::mt19937_64& random) {
  return static_cast<double>(random() >> 11) * 0x1p-52 - 1.0;  // -1 ... 1
}
Eigen::VectorXd random_row(Eigen::Index n, std::mt19937_64& random) {
  Eigen::VectorXd row(n);
  for (Eigen::Index i = 0; i < n; ++i) row[i] = uniform(random);
  return row;
}
// Sums of n terms in another order: rounding.
double rounding(const Eigen::VectorXd& row) {
  return 4.0 * static_cast<double>(row.size()) * kEps * row.lpNorm<1>();
}

using Sequences = std::set<std::vector<int>>;

// Independent of the trellis: every run of two characters, by the encoder.
Sequences pairs_of_8b10b() {
  Sequences out;
  const auto symbols = [](const Character8b10b& c, std::vector<int>& to) {
    for (const bool bit : c.bits) to.push_back(bit ? 1 : -1);
  };
  std::vector<std::pair<std::uint8_t, bool>> characters;
  for (int b = 0; b < 256; ++b) characters.push_back({static_cast<std::uint8_t>(b), false});
  for (const int b : {0x1C, 0x3C, 0x5C, 0x7C, 0x9C, 0xBC, 0xDC, 0xFC, 0xF7, 0xFB, 0xFD, 0xFE}) {
    characters.push_back({static_cast<std::uint8_t>(b), true});
  }
  for (const int disparity : {-1, 1}) {
    for (const auto& [b1, k1] : characters) {
      const Character8b10b first = encode_8b10b(b1, k1, disparity);
      for (const auto& [b2, k2] : characters) {
        std::vector<int> sequence;
        symbols(first, sequence);
        symbols(encode_8b10b(b2, k2, first.disparity), sequence);
        out.insert(sequence);
      }
    }
  }
  return out;
}

// Most that `sequences` do to a main symbol of `sign` at `position`; the row must not reach past
// the sequences, which begin with a character.
double brute_force(const Sequences& sequences, int period, const Eigen::VectorXd& row,
                   Eigen::Index main_index, int position, int sign) {
  const Eigen::Index before = row.size() - 1 - main_index;  // symbols sent before the main one
  Eigen::Index main_at = position;
  while (main_at < before) main_at += period;
  double worst = -std::numeric_limits<double>::infinity();
  for (const std::vector<int>& a : sequences) {
    if (a[static_cast<std::size_t>(main_at)] != sign) continue;
    double isi = 0.0;
    for (Eigen::Index i = 0; i < row.size(); ++i) {
      if (i != main_index)
        isi -= sign * row[i] * a[static_cast<std::size_t>(main_at + main_index - i)];
    }
    worst = std::max(worst, isi);
  }
  return worst;
}

// Checks row 7. 11 cursors span at most two characters wherever the main one stands.
TEST(CodedWorstCase, Of8b10bEqualsBruteForceOverAllPairsOfCharacters) {
  const Sequences sequences = pairs_of_8b10b();
  std::mt19937_64 random(3);
  const LineCode code = LineCode::code_8b10b();
  for (const Eigen::Index main_index : {0, 3, 10}) {
    const Eigen::VectorXd row = random_row(11, random);
    const CodedWorstCase found = coded_worst_case(code, row, main_index);
    double worst = 0.0;
    for (int p = 0; p < 10; ++p) {
      for (const int sign : {1, -1}) {
        const double expected = brute_force(sequences, 10, row, main_index, p, sign);
        EXPECT_NEAR(found.by_position_v(p, sign > 0 ? 0 : 1), expected, rounding(row))
            << main_index << " " << p << " " << sign;
        worst = std::max(worst, expected);
      }
    }
    EXPECT_NEAR(found.isi_v(), worst, rounding(row));
    EXPECT_NEAR(found.up_v, found.down_v, rounding(row));
  }
}

StateMachine lopsided_machine() {
  // Ones may stand alone, zeros may not: after a 1 comes at least "0 0".
  StateMachine machine;
  machine.num_states = 3;
  machine.edges = {
      {0, 1, {1.0}, 0.5}, {0, 0, {-1.0}, 0.5}, {1, 2, {-1.0}, 1.0}, {2, 0, {-1.0}, 1.0}};
  return machine;
}

// Brute force over bit strings that obey the machine's rule, not its states.
TEST(CodedWorstCase, OfALopsidedMachineEqualsBruteForceForBothSigns) {
  const int length = 12;
  Sequences sequences;
  for (unsigned bits = 0; bits < 1U << length; ++bits) {
    std::vector<int> a;
    for (int i = 0; i < length; ++i) a.push_back((bits >> i & 1U) ? 1 : -1);
    bool allowed = true;
    for (std::size_t i = 0; i + 1 < a.size(); ++i) {
      if (a[i] != 1) continue;
      allowed = allowed && a[i + 1] == -1 && (i + 2 >= a.size() || a[i + 2] == -1);
    }
    if (allowed) sequences.insert(a);
  }
  std::mt19937_64 random(4);
  const LineCode code = LineCode::machine(lopsided_machine());
  for (int trial = 0; trial < 20; ++trial) {
    const Eigen::VectorXd row = random_row(length, random);
    const Eigen::Index main_index = trial % length;
    const CodedWorstCase found = coded_worst_case(code, row, main_index);
    EXPECT_NEAR(found.down_v, brute_force(sequences, 1, row, main_index, 0, 1), rounding(row));
    EXPECT_NEAR(found.up_v, brute_force(sequences, 1, row, main_index, 0, -1), rounding(row));
  }
}

// Checks row 7. Source: digital sum within +-3 (Widmer and Franaszek 1983): any stretch sums to at
// most 6, and stretches of whole characters reach it. An odd number of +-1 has an odd sum, so 5 is
// the most there; +-3 stand only at some places of a character, so 4 is the most at lengths 4 and 6
// mod 10 (recomputed by the script of the next test).
TEST(CodedWorstCase, OfAFlatTailUnder8b10bIsSixTimesTheCursor) {
  const double r = 0.01;
  const LineCode code = LineCode::code_8b10b();
  for (Eigen::Index length = 20; length <= 80; ++length) {
    Eigen::VectorXd row = Eigen::VectorXd::Constant(length + 1, r);
    row[0] = 1.0;
    const int most = length % 2 == 1 ? 5 : length % 10 == 4 || length % 10 == 6 ? 4 : 6;
    EXPECT_NEAR(coded_worst_case(code, row, 0).isi_v(), most * r, rounding(row)) << length;
  }
}

// Independent: longest paths over whole characters in numpy, tables written down a second time.
TEST(CodedWorstCase, Of8b10bEqualsNumpysLongestPath) {
  if (!test::has_scipy()) GTEST_SKIP() << "no numpy";
  const auto reference = test::run_python("tests/outside/line_code_reference.py");
  ASSERT_TRUE(reference.has_value());
  const LineCode code = LineCode::code_8b10b();
  Eigen::Index length = 20;
  for (const double most : (*reference)["flat"]) {
    EXPECT_NEAR(coded_peak_v(code, Eigen::VectorXd::Ones(length)), most, 1e-12) << length;
    ++length;
  }
  EXPECT_EQ(length, 81);
  for (const auto& sample : (*reference)["rows"]) {
    const auto values = sample["row"].get<std::vector<double>>();
    const Eigen::VectorXd row =
        Eigen::Map<const Eigen::VectorXd>(values.data(), static_cast<Eigen::Index>(values.size()));
    const CodedWorstCase found =
        coded_worst_case(code, row, sample["main_index"].get<Eigen::Index>());
    for (int p = 0; p < 10; ++p) {
      EXPECT_NEAR(found.by_position_v(p, 0), sample["worst"][static_cast<std::size_t>(p)],
                  rounding(row));
    }
  }
}

TEST(CodedWorstCase, OfUncodedSymbolsIsTheSumOfMagnitudes) {
  std::mt19937_64 random(5);
  for (const int levels : {2, 4}) {
    const Eigen::VectorXd row = random_row(30, random);
    const double sum = row.lpNorm<1>() - std::abs(row[7]);
    const CodedWorstCase found = coded_worst_case(LineCode::none(levels), row, 7);
    EXPECT_NEAR(found.down_v, sum, rounding(row));
    EXPECT_NEAR(found.up_v, sum, rounding(row));
    EXPECT_NEAR(coded_peak_v(LineCode::none(levels), row), row.lpNorm<1>(), rounding(row));
  }
}

// By hand: under Manchester the two symbols of a character have opposite signs, so each character
// adds |difference|; the main symbol's partner is minus the main symbol.
TEST(CodedWorstCase, OfManchesterIsTheSumOfDifferences) {
  Eigen::VectorXd row(5);
  row << 1.0, 0.5, 0.3, -0.2, 0.1;  // cursors 0 ... 4
  const CodedWorstCase found = coded_worst_case(LineCode::manchester(), row, 0);
  // Second place: partner at cursor 1 (its sign is -1: helps the pulse down by +0.5), pairs (2, 3)
  // and 4 with a symbol outside. First place: pairs (1, 2) and (3, 4).
  EXPECT_NEAR(found.by_position_v(1, 0), 0.5 + 0.5 + 0.1, 1e-15);
  EXPECT_NEAR(found.by_position_v(0, 0), 0.2 + 0.3, 1e-15);
  EXPECT_EQ(found.cut.position, 1);
}

// By hand: symbols are free but for a header at places 0 and 1 of 66, which adds |difference|.
TEST(CodedWorstCase, Of64b66bLosesTheHeadersOnly) {
  std::mt19937_64 random(6);
  const Eigen::VectorXd row = random_row(100, random);
  const CodedWorstCase found = coded_worst_case(LineCode::code_64b66b(), row, 20);
  for (const int p : {10, 40}) {
    double expected = row.lpNorm<1>() - std::abs(row[20]);
    for (Eigen::Index k = 0; k + 1 < 100; ++k) {
      // Entry i holds the symbol sent i - 20 before the main one, at place (p - i + 20) mod 66.
      if ((p - static_cast<int>(k + 1) + 20 + 660) % 66 == 0) {
        expected += std::abs(row[k] - row[k + 1]) - std::abs(row[k]) - std::abs(row[k + 1]);
      }
    }
    EXPECT_NEAR(found.by_position_v(p, 0), expected, rounding(row)) << p;
  }
}

// The sequence is one that the encoder sends, whole characters long, and makes the sum it stands
// for around its main symbol.
TEST(CodedWorstCase, ReturnsTheSequenceThatDoesIt) {
  std::mt19937_64 random(7);
  const LineCode code = LineCode::code_8b10b();
  for (int trial = 0; trial < 60; ++trial) {
    const Eigen::Index n = 1 + trial;
    const Eigen::Index main_index = (7 * trial) % n;
    const Eigen::VectorXd row = random_row(n, random);
    const CodedWorstCase found = coded_worst_case(code, row, main_index);
    const Eigen::VectorXd& a = found.cut.sequence;
    ASSERT_GT(a.size(), 0);
    EXPECT_EQ(names_8b10b(a).size(), static_cast<std::size_t>(a.size() / 10)) << a.transpose();
    EXPECT_EQ(found.cut.main_at % 10, found.cut.position);
    double isi = 0.0;
    for (Eigen::Index i = 0; i < n; ++i) {
      if (i != main_index) isi -= row[i] * a[found.cut.main_at + main_index - i];
    }
    EXPECT_NEAR(isi * a[found.cut.main_at], found.isi_v(), rounding(row));
  }
}

TEST(CodedWorstCase, CutsAreBoundsForEveryOtherRow) {
  std::mt19937_64 random(8);
  for (const LineCode& code : {LineCode::code_8b10b(), LineCode::machine(lopsided_machine())}) {
    CodedIsi work(code, 60, 9);
    const Eigen::VectorXd first = random_row(60, random);
    const CodeCut cut = work.cut(first);
    EXPECT_NEAR(cut.signs.dot(first), work.worst(first), rounding(first));
    EXPECT_EQ(cut.signs[9], 0.0);
    for (int i = 0; i < 20; ++i) {
      const Eigen::VectorXd other = random_row(60, random);
      EXPECT_LE(cut.signs.dot(other), work.worst(other) + rounding(other));
    }
  }
}

// Property of the issue: random data's worst case >= the code's >= anything a coded stream does.
TEST(CodedWorstCase, LiesBetweenRandomDataAndAnySimulatedStream) {
  std::mt19937_64 random(9);
  const LineCode code = LineCode::code_8b10b();
  for (int trial = 0; trial < 50; ++trial) {
    const Eigen::Index n = 5 + static_cast<Eigen::Index>(random() % 60);
    const auto main_index = static_cast<Eigen::Index>(random() % static_cast<std::uint64_t>(n));
    const Eigen::VectorXd row = random_row(n, random);
    const CodedWorstCase found = coded_worst_case(code, row, main_index);
    EXPECT_LE(found.isi_v(), row.lpNorm<1>() - std::abs(row[main_index]) + rounding(row));
    const Eigen::VectorXd a = random_stream(code, 2000, random);
    const Eigen::VectorXd in_order = row.reverse();
    const Eigen::Index main_at = n - 1 - main_index;
    for (Eigen::Index start = 0; start + n <= a.size(); ++start) {
      const double main_symbol = a[start + main_at];
      const double isi = row[main_index] - main_symbol * in_order.dot(a.segment(start, n));
      const auto position = static_cast<Eigen::Index>((start + main_at) % 10);
      ASSERT_LE(isi, found.by_position_v(position, main_symbol > 0 ? 0 : 1) + rounding(row));
    }
  }
}

TEST(CodedWorstCase, PeakOfAnAggressorIsTheWorstOverAllSequences) {
  const Sequences sequences = pairs_of_8b10b();
  std::mt19937_64 random(10);
  const Eigen::VectorXd row = random_row(11, random);
  double worst = 0.0;
  for (const std::vector<int>& a : sequences) {
    for (std::size_t start = 0; start + 11 <= 20; ++start) {
      double sum = 0.0;
      for (std::size_t i = 0; i < 11; ++i) {
        sum += row[10 - static_cast<Eigen::Index>(i)] * a[start + i];
      }
      worst = std::max(worst, std::abs(sum));
    }
  }
  EXPECT_NEAR(coded_peak_v(LineCode::code_8b10b(), row), worst, rounding(row));
}

TEST(CodedWorstCase, RefusesAMainIndexOrRowThatDoesNotFit) {
  EXPECT_THROW(CodedIsi(LineCode::none(), 4, 4), std::invalid_argument);
  EXPECT_THROW(CodedIsi(LineCode::none(), 4, -1), std::invalid_argument);
  EXPECT_THROW(CodedIsi(LineCode::none(), 0, std::nullopt), std::invalid_argument);
  CodedIsi work(LineCode::code_8b10b(), 4, 1);
  EXPECT_THROW((void)work.worst(Eigen::VectorXd::Zero(5)), std::invalid_argument);
  EXPECT_THROW((void)work.worst_at(Eigen::VectorXd::Zero(4), 10, false), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

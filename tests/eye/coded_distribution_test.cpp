#include "tapwright/eye/coded_distribution.hpp"

#include <gtest/gtest.h>

#include <array>
#include <cmath>
#include <map>
#include <random>
#include <utility>
#include <vector>

#include "tapwright/base/normal.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {
namespace {

double uniform(std::mt19937_64& random) {
  return static_cast<double>(random() >> 11) * 0x1p-52 - 1.0;  // -1 ... 1
}

/// A decaying row with random signs: main cursor 0.4 V, the others summing to a few hundred mV.
CodedDisturbance sample(Eigen::Index n, Eigen::Index main_index, double sigma_v,
                        std::mt19937_64& random) {
  CodedDisturbance out;
  out.row.resize(n);
  for (Eigen::Index i = 0; i < n; ++i) {
    const double distance = std::abs(static_cast<double>(i - main_index));
    out.row[i] = 0.08 * uniform(random) / (1.0 + 0.3 * distance);
  }
  out.row[main_index] = 0.4;
  out.main_index = main_index;
  out.others.sigma_v = sigma_v;
  return out;
}

// Independent of the trellis: all pairs of data characters by the encoder, each as likely, from
// both disparities, and the Gaussian tail of each. 11 cursors span at most two characters.
class Enumeration {
 public:
  explicit Enumeration(const CodedDisturbance& d) : sigma_v_(d.others.sigma_v) {
    const Eigen::Index before = d.row.size() - 1 - d.main_index;
    for (const int disparity : {-1, 1}) {
      for (int b1 = 0; b1 < 256; ++b1) {
        const Character8b10b first = encode_8b10b(static_cast<std::uint8_t>(b1), false, disparity);
        for (int b2 = 0; b2 < 256; ++b2) {
          const Character8b10b second =
              encode_8b10b(static_cast<std::uint8_t>(b2), false, first.disparity);
          std::array<double, 20> a{};
          for (std::size_t i = 0; i < 10; ++i) {
            a[i] = first.bits[i] ? 1.0 : -1.0;
            a[i + 10] = second.bits[i] ? 1.0 : -1.0;
          }
          for (Eigen::Index p = 0; p < 10; ++p) {
            const Eigen::Index main_at = p < before ? p + 10 : p;
            double push = 0.0;
            for (Eigen::Index i = 0; i < d.row.size(); ++i) {
              if (i == d.main_index) continue;
              push -= d.row[i] * a[static_cast<std::size_t>(main_at + d.main_index - i)];
            }
            // Many sequences are alike within the row: count them together.
            ++count_[push * a[static_cast<std::size_t>(main_at)]];
          }
        }
      }
    }
  }
  [[nodiscard]] double exceedance(double level_v) const {
    double sum = 0.0;
    double total = 0.0;
    for (const auto& [push, count] : count_) {
      sum += count * gaussian_tail((level_v - push) / sigma_v_);
      total += count;
    }
    return sum / total;
  }

 private:
  double sigma_v_;
  std::map<double, double> count_;
};

// Tolerance: the documented relative accuracy.
TEST(CodedDistribution, EqualsTheEnumerationOfAllPairsOfCharacters) {
  std::mt19937_64 random(11);
  const LineCode code = LineCode::code_8b10b();
  for (const double sigma_v : {0.005, 0.02}) {
    const CodedDisturbance d = sample(11, 3, sigma_v, random);
    const Enumeration all(d);
    for (const double level_v : {-0.05, 0.0, 0.1, 0.2, 0.3}) {
      const double expected = all.exceedance(level_v);
      if (expected < 1e-30) continue;
      EXPECT_NEAR(exceedance(code, d, level_v) / expected, 1.0, 1e-5) << sigma_v << " " << level_v;
    }
    for (const double probability : {1e-3, 1e-9, 1e-15}) {
      const double level_v = exceeded_level_v(code, d, probability);
      EXPECT_NEAR(all.exceedance(level_v) / probability, 1.0, 1e-5)
          << sigma_v << " " << probability;
    }
  }
}

StateMachine lopsided_machine() {
  StateMachine machine;  // after a 1 come at least two 0
  machine.num_states = 3;
  machine.edges = {
      {0, 1, {1.0}, 0.4}, {0, 0, {-1.0}, 0.6}, {1, 2, {-1.0}, 1.0}, {2, 0, {-1.0}, 1.0}};
  return machine;
}
StateMachine four_level_machine() {
  StateMachine machine;  // never from one outermost level to the other
  machine.num_states = 4;
  for (int from = 0; from < 4; ++from) {
    for (int to = 0; to < 4; ++to) {
      if (std::abs(from - to) == 3) continue;
      const double probability = from == 0 || from == 3 ? 1.0 / 3 : 0.25;
      machine.edges.push_back({from, to, {2.0 * to / 3 - 1.0}, probability});
    }
  }
  return machine;
}

// The two ways share the trellis but no arithmetic. Tolerance, method: the grid's documented error
// theta B step^2 / 8, theta by the slope of ln P, with B <= 200 splits.
TEST(CodedDistribution, ContourAndGridAgreeForEveryCode) {
  std::mt19937_64 random(12);
  const std::vector<LineCode> codes = {
      LineCode::none(),       LineCode::code_8b10b(),
      LineCode::manchester(), LineCode::machine(lopsided_machine()),
      LineCode::none(4),      LineCode::machine(four_level_machine(), 4)};
  for (std::size_t c = 0; c < codes.size(); ++c) {
    CodedDisturbance d = sample(40, 6, 0.004, random);
    d.others.symbols_v = Eigen::Vector3d(0.01, -0.02, 0.005);
    d.others.levels = codes[c].levels();
    d.others.binary_v = Eigen::Vector2d(0.003, 0.002);
    const double step_v = 2e-5;
    const CodedGrid grid = coded_grid(codes[c], d, step_v);
    EXPECT_NEAR(grid.mass.sum(), 1.0, 1e-12);
    for (const double probability : {1e-4, 1e-12}) {
      const double contour_v = exceeded_level_v(codes[c], d, probability);
      const double grid_v = grid.exceeded_level_v(probability);
      const double theta = std::log(grid.exceedance(grid_v - 1e-3) / probability) / 1e-3;
      const double error_v = theta * 200 * step_v * step_v / 8;
      EXPECT_LE(error_v, 1e-4);
      EXPECT_NEAR(contour_v, grid_v, error_v) << c << " " << probability;
      EXPECT_NEAR(exceedance(codes[c], d, contour_v) / probability, 1.0, 1e-5) << c;
    }
  }
}

TEST(CodedDistribution, WithoutACodeIsThatOfIndependentSymbols) {
  // Two cursors and noise by hand: a quarter each of +-0.1 +- 0.05 around the noise.
  CodedDisturbance d;
  d.row = Eigen::Vector3d(0.1, 0.5, 0.05);
  d.main_index = 1;
  d.others.sigma_v = 0.02;
  for (const double x : {0.05, 0.15, 0.25}) {
    double expected = 0.0;
    for (const double isi : {0.15, 0.05, -0.05, -0.15}) {
      expected += 0.25 * gaussian_tail((x - isi) / 0.02);
    }
    EXPECT_NEAR(exceedance(LineCode::none(), d, x) / expected, 1.0, 1e-5);
  }
}

// Without noise nothing exceeds the worst case of the code's sequences, data characters only, by
// more than the splits of the grid; and N(P) never exceeds worst case plus Q sigma.
TEST(CodedDistribution, NeverExceedsTheWorstCaseAndTheNoise) {
  std::mt19937_64 random(13);
  const LineCode code = LineCode::code_8b10b(false);
  for (int trial = 0; trial < 10; ++trial) {
    CodedDisturbance d = sample(60, 8, 0.003, random);
    const double worst_v = coded_worst_case(code, d.row, d.main_index).isi_v();
    for (const double probability : {1e-6, 1e-12, 1e-18}) {
      EXPECT_LE(exceeded_level_v(code, d, probability),
                worst_v + gaussian_quantile_of_tail(probability) * 0.003);
    }
  }
  CodedDisturbance d = sample(30, 4, 0.0, random);
  const double worst_v = coded_worst_case(code, d.row, d.main_index).isi_v();
  const CodedGrid grid = coded_grid(code, d, 1e-4);
  EXPECT_LE(grid.exceedance(worst_v + 14 * 1e-4), 0.0);
}

// Little or no noise: the documented 0.2 % of the standard deviation, and 0.1 % for the grid's own
// error: theta B step^2 / 8, and half a step where the tail is a staircase.
TEST(CodedDistribution, WithLittleNoiseStaysCloseToTheGrid) {
  std::mt19937_64 random(15);
  for (const LineCode& code : {LineCode::code_8b10b(), LineCode::machine(lopsided_machine())}) {
    for (const auto& [n, sigma_v] : {std::pair{6, 1e-4}, std::pair{20, 0.0}, std::pair{60, 1e-4}}) {
      const CodedDisturbance d = sample(n, 4, sigma_v, random);
      const CodedMoments moments = coded_moments(code, d.row, d.main_index);
      const CodedGrid grid = coded_grid(code, d, 2e-5);
      for (const double probability : {1e-3, 1e-6, 1e-12}) {
        EXPECT_NEAR(exceeded_level_v(code, d, probability), grid.exceeded_level_v(probability),
                    3e-3 * moments.deviation_v)
            << code.period() << " " << n << " " << sigma_v << " " << probability;
      }
    }
  }
}

// A count over an encoded stream. Statistical: 5 sigma of the mean of batches of 1000 symbols,
// which hold the code's own correlations.
TEST(CodedDistribution, AgreesWithACountOverAnEncodedStream) {
  std::mt19937_64 random(14);
  for (const LineCode& code : {LineCode::code_8b10b(), LineCode::machine(lopsided_machine())}) {
    const CodedDisturbance d = sample(50, 5, 0.01, random);
    const double level_v = exceeded_level_v(code, d, 1e-2);
    const Eigen::Index batch = 1000;
    const Eigen::Index num_batches = 1000;
    const Eigen::VectorXd a =
        random_stream(code, (batch * num_batches + 60) / code.period(), random);
    const Eigen::VectorXd in_order = d.row.reverse();
    const Eigen::Index main_at = d.row.size() - 1 - d.main_index;
    std::vector<double> share;
    for (Eigen::Index b = 0; b < num_batches; ++b) {
      double sum = 0.0;
      for (Eigen::Index s = b * batch; s < (b + 1) * batch && s + 50 <= a.size(); ++s) {
        const double main_symbol = a[s + main_at];
        const double push = d.row[d.main_index] - main_symbol * in_order.dot(a.segment(s, 50));
        sum += gaussian_tail((level_v - push) / d.others.sigma_v);  // the noise, exactly
      }
      share.push_back(sum / static_cast<double>(batch));
    }
    double mean = 0.0;
    double square = 0.0;
    for (const double s : share) mean += s / static_cast<double>(num_batches);
    for (const double s : share) square += (s - mean) * (s - mean);
    const double deviation = std::sqrt(square) / static_cast<double>(num_batches);
    EXPECT_NEAR(mean, 1e-2, 5 * deviation);
    EXPECT_LT(deviation, 1e-3);
  }
}

TEST(CodedDistribution, RefusesAProbabilityOrMainIndexOutOfRange) {
  CodedDisturbance d;
  d.row = Eigen::Vector3d(0.1, 0.5, 0.05);
  d.main_index = 1;
  d.others.sigma_v = 0.02;
  const LineCode code = LineCode::none();
  EXPECT_THROW((void)exceeded_level_v(code, d, 0.0), std::invalid_argument);
  EXPECT_THROW((void)exceeded_level_v(code, d, 0.5), std::invalid_argument);
  EXPECT_THROW((void)coded_grid(code, d, 0.0), std::invalid_argument);
  EXPECT_THROW((void)coded_grid(code, d, 1e-12), std::invalid_argument);
  d.main_index = 3;
  EXPECT_THROW((void)exceedance(code, d, 0.1), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright

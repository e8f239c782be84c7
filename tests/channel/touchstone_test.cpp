#include "tapwright/channel/touchstone.hpp"

#include <gtest/gtest.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cmath>
#include <filesystem>
#include <fstream>
#include <random>
#include <sstream>
#include <thread>

#include "support/input_files.hpp"
#include "support/measured_data.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/channel/text_file.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Options = TouchstoneOptions;

/// The notes one a line, with "file" for the name.
std::string notes_text(std::vector<Diagnostic> notes) {
  std::string text;
  for (Diagnostic& note : notes) {
    note.file = "file";
    text += to_string(note) + "\n";
  }
  return text;
}

// Every dialect is a file of a few points whose values are solved by hand from the specifications
// (Touchstone 1.1 and 2.0); the .expect beside it gives notes, references and S in row order.
class TouchstoneDialect : public testing::TestWithParam<std::string> {};

TEST_P(TouchstoneDialect, ReadsAsExpected) {
  const std::string folder = std::string(TAPWRIGHT_SOURCE_DIR) + "/tests/channel/touchstone/";
  const auto result = parse_touchstone(test::bytes_of(folder + GetParam()), GetParam());
  std::istringstream expected(test::bytes_of(folder + GetParam() + ".expect"));
  std::string notes;
  std::string line;
  int ports = 0;
  std::vector<double> references;
  std::vector<std::vector<double>> points;
  while (std::getline(expected, line)) {
    std::istringstream words(line);
    std::string key;
    words >> key;
    if (key == "ports") {
      words >> ports;
    } else if (key == "reference" || key == "point") {
      std::vector<double> numbers;
      for (double number = 0; words >> number;) numbers.push_back(number);
      if (key == "point") {
        points.push_back(numbers);
      } else {
        references = numbers;
      }
    } else {
      notes += line + "\n";
    }
  }
  EXPECT_EQ(notes_text(result.notes), notes);
  ASSERT_TRUE(result);
  const Network& network = *result.value;
  ASSERT_EQ(network.num_ports(), ports);
  ASSERT_EQ(static_cast<std::size_t>(network.num_points()), points.size());
  ASSERT_EQ(references.size(), static_cast<std::size_t>(ports));
  for (int i = 0; i < ports; ++i) {
    EXPECT_EQ(network.reference_ohm[i], Complex(references[static_cast<std::size_t>(i)]));
  }
  for (std::size_t k = 0; k < points.size(); ++k) {
    ASSERT_EQ(points[k].size(), 1 + 2 * static_cast<std::size_t>(ports * ports));
    EXPECT_EQ(network.frequencies_hz[static_cast<Eigen::Index>(k)], points[k][0]);
    for (int i = 0; i < ports; ++i) {
      for (int j = 0; j < ports; ++j) {
        const auto at = 1 + 2 * static_cast<std::size_t>(i * ports + j);
        const Complex wanted(points[k][at], points[k][at + 1]);
        // Rounding: angles and conversions of order 1 take fewer than 8 operations.
        EXPECT_LE(std::abs(network.at(static_cast<Eigen::Index>(k))(i, j) - wanted),
                  8 * std::numeric_limits<double>::epsilon() * std::max(1.0, std::abs(wanted)))
            << "point " << k << " S" << i + 1 << "," << j + 1;
      }
    }
  }
}

INSTANTIATE_TEST_SUITE_P(
    Files, TouchstoneDialect,
    testing::ValuesIn(test::files_with_expectation("tests/channel/touchstone")),
    [](const auto& file) { return test::test_name_of(file.param); });

class BadTouchstone : public testing::TestWithParam<std::string> {};

TEST_P(BadTouchstone, GivesItsNotes) {
  const std::string folder = std::string(TAPWRIGHT_SOURCE_DIR) + "/tests/bad/touchstone/";
  const auto result = parse_touchstone(test::bytes_of(folder + GetParam()), GetParam());
  EXPECT_FALSE(result);
  EXPECT_EQ(notes_text(result.notes), test::bytes_of(folder + GetParam() + ".expect"));
}

INSTANTIATE_TEST_SUITE_P(Files, BadTouchstone,
                         testing::ValuesIn(test::files_with_expectation("tests/bad/touchstone")),
                         [](const auto& file) { return test::test_name_of(file.param); });

Network random_network(int ports, int points, std::mt19937_64& generator) {
  std::uniform_real_distribution<double> uniform(-1.0, 1.0);
  Network network = empty_network(Eigen::VectorXd(points), Eigen::VectorXcd::Constant(ports, 50.0));
  double frequency_hz = 0.0;
  for (double& f : network.frequencies_hz) {
    f = frequency_hz;
    frequency_hz += 1e8 * (1.0 + uniform(generator));
  }
  for (Complex& value : network.values.reshaped()) {
    // Magnitudes over many decades, so that every form of number is written.
    const double scale = std::pow(10.0, 12.0 * uniform(generator));
    value = {scale * uniform(generator), scale * uniform(generator)};
  }
  return network;
}

void expect_same_bits(const Network& a, const Network& b) {
  EXPECT_EQ(a.frequencies_hz, b.frequencies_hz);
  EXPECT_EQ(a.values, b.values);
  EXPECT_EQ(a.reference_ohm, b.reference_ohm);
}

TEST(Touchstone, ReadsBackBitForBitWhatItWroteForAnyPortCountAndUnit) {
  std::mt19937_64 generator(1);
  for (const int ports : {1, 2, 3, 4, 5, 8, 12, 32}) {
    for (const auto unit :
         {Options::Unit::kHz, Options::Unit::kKhz, Options::Unit::kMhz, Options::Unit::kGhz}) {
      for (const int version : {1, 2}) {
        const Network network = random_network(ports, 7, generator);
        Options options;
        options.unit = unit;
        options.version = version;
        options.comments = {"two\nlines"};
        const auto again = parse_touchstone(write_touchstone(network, options), "a.txt", ports);
        ASSERT_TRUE(again) << notes_text(again.notes);
        EXPECT_TRUE(again.notes.empty()) << notes_text(again.notes);
        expect_same_bits(network, *again.value);
      }
    }
  }
}

TEST(Touchstone, WritesUnequalReferencesInVersion2) {
  std::mt19937_64 generator(2);
  Network network = random_network(3, 4, generator);
  network.reference_ohm << 50.0, 42.5, 100.0;
  const std::string text = write_touchstone(network);
  EXPECT_NE(text.find("[Reference] 50 42.5 100"), std::string::npos);
  const auto again = parse_touchstone(text, "a.s3p");
  ASSERT_TRUE(again) << notes_text(again.notes);
  expect_same_bits(network, *again.value);
  Options options;
  options.version = 1;
  EXPECT_THROW((void)write_touchstone(network, options), std::invalid_argument);
  network.reference_ohm[0] = Complex(50.0, 1.0);
  EXPECT_THROW((void)write_touchstone(network), std::invalid_argument);
}

TEST(Touchstone, KeepsValuesToRoundingInMagnitudeAndDecibelForm) {
  std::mt19937_64 generator(3);
  const Network network = random_network(2, 50, generator);
  for (const auto format : {Options::Format::kMagnitudeAngle, Options::Format::kDecibelAngle}) {
    Options options;
    options.format = format;
    const auto again = parse_touchstone(write_touchstone(network, options), "a.s2p");
    ASSERT_TRUE(again);
    for (Eigen::Index i = 0; i < network.values.size(); ++i) {
      const Complex wanted = network.values.reshaped()[i];
      // Rounding: a logarithm of up to 240 dB is good to 240 eps / 8.7 relative, angles to pi eps.
      EXPECT_LE(std::abs(again.value->values.reshaped()[i] - wanted),
                64 * std::numeric_limits<double>::epsilon() * std::abs(wanted));
    }
  }
}

TEST(Touchstone, ReadsALargeFilePieceByPieceAsItReadsTheWholeText) {
  const std::filesystem::path folder = std::filesystem::temp_directory_path();
  const std::string path =
      (folder / ("tapwright_touchstone_" + std::to_string(::getpid()) + ".s8p")).string();
  std::mt19937_64 generator(4);
  // Some 12 MB: three pieces.
  const Network network = random_network(8, 4500, generator);
  std::string text = write_touchstone(network);
  std::ofstream(path, std::ios::binary) << text;
  const auto result = read_touchstone(path);
  ASSERT_TRUE(result) << notes_text(result.notes);
  expect_same_bits(network, result.value->network);
  EXPECT_EQ(result.value->sha256, sha256_hex(text));
  EXPECT_EQ(file_sha256(path).value, sha256_hex(text));
  // An error far behind keeps its line.
  text += "x\n";
  std::ofstream(path, std::ios::binary) << text;
  EXPECT_EQ(notes_text(read_touchstone(path).notes),
            notes_text(parse_touchstone(text, path).notes));
  EXPECT_FALSE(read_touchstone(path));
  std::filesystem::remove(path);
  EXPECT_EQ(notes_text(read_touchstone(path).notes), "file: error: no such file\n");
}

TEST(Touchstone, ReadsAPipeWhoseSizeNobodyKnows) {
  const std::string path = (std::filesystem::temp_directory_path() /
                            ("tapwright_touchstone_" + std::to_string(::getpid()) + "_pipe.s8p"))
                               .string();
  ASSERT_EQ(::mkfifo(path.c_str(), 0600), 0);
  std::mt19937_64 generator(5);
  const Network network = random_network(8, 4500, generator);
  std::thread writer([&] { std::ofstream(path, std::ios::binary) << write_touchstone(network); });
  const auto result = read_touchstone(path);
  writer.join();
  std::filesystem::remove(path);
  ASSERT_TRUE(result) << notes_text(result.notes);
  expect_same_bits(network, result.value->network);
}

TEST(Touchstone, TakesTheNumberOfPortsFromTheNameInEitherCase) {
  EXPECT_EQ(ports_from_file_name("a/b.s2p"), 2);
  EXPECT_EQ(ports_from_file_name("B.S32P"), 32);
  EXPECT_EQ(ports_from_file_name("x.y.s4p"), 4);
  for (const char* name :
       {"a", "a.sp", "a.s0p", "a.s2", "a.s2px", "a.sxp", "s2p", "a.s-2p", "a.ts"}) {
    EXPECT_EQ(ports_from_file_name(name), std::nullopt) << name;
  }
}

TEST(Touchstone, ReadsTheMeasuredFiles) {
  const auto path = test::measured_file("microstrip_100mm.s2p");
  if (!path) GTEST_SKIP() << test::kNoMeasuredFiles;
  const auto result = parse_touchstone(test::bytes_of(*path), *path);
  ASSERT_TRUE(result) << notes_text(result.notes);
  EXPECT_TRUE(result.notes.empty());
  EXPECT_EQ(result.value->num_points(), 10000);
  EXPECT_EQ(result.value->frequencies_hz[0], 1e6);
  EXPECT_EQ(result.value->frequencies_hz[9999], 1e10);
  // As they stand in the file's first line of data.
  EXPECT_EQ(result.value->at(0)(1, 0), Complex(0.9958727, -0.0050460));
  EXPECT_EQ(result.value->at(0)(0, 1), Complex(1.0018340, -0.0025891));
  const auto pair = test::measured_file("coupled_pair_through.s4p");
  ASSERT_TRUE(pair);
  const auto four = parse_touchstone(test::bytes_of(*pair), *pair);
  ASSERT_TRUE(four) << notes_text(four.notes);
  EXPECT_EQ(four.value->num_points(), 1000);
  EXPECT_EQ(four.value->at(0)(2, 0),
            Complex(9.99174531298837598214e-001, -2.35022067247729546380e-002));
}

}  // namespace
}  // namespace tapwright

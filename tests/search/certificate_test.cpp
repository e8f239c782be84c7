#include "tapwright/search/certificate.hpp"

#include <gtest/gtest.h>

#include "search/random_link.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

struct Proven {
  EyeModel model;
  Certificate certificate;
};

Proven proven_link() {
  std::mt19937_64 random(23);
  test::LinkShape shape;
  shape.num_codes = 16;
  Proven result{test::random_model(random, shape), {}};
  SearchOptions options;
  options.certificate = true;
  options.compare = false;
  result.certificate = *solve(result.model, options).certificate;
  return result;
}

TEST(Certificate, HoldsForTheLinkItWasMadeFor) {
  const Proven p = proven_link();
  const CertificateCheck check = check_certificate(p.model, p.certificate);
  EXPECT_TRUE(check.holds) << check.reason;
  EXPECT_EQ(check.num_cells, static_cast<std::int64_t>(p.certificate.cells.size()));
}

TEST(Certificate, FailsWhenTheBoundIsSetTooLow) {
  Proven p = proven_link();
  p.certificate.bound_v -= 1e-6;
  const CertificateCheck check = check_certificate(p.model, p.certificate);
  EXPECT_FALSE(check.holds);
  EXPECT_NE(check.reason.find("above the bound"), std::string::npos) << check.reason;
}

TEST(Certificate, FailsWhenACellIsMissing) {
  Proven p = proven_link();
  // The last cell is the one searched last; nothing refers to its multipliers.
  p.certificate.cells.pop_back();
  const CertificateCheck check = check_certificate(p.model, p.certificate);
  EXPECT_FALSE(check.holds);
  EXPECT_NE(check.reason.find("nothing is said about"), std::string::npos) << check.reason;
}

TEST(Certificate, FailsWhenHalfOfABoxIsLeftOut) {
  Proven p = proven_link();
  for (Certificate::Cell& cell : p.certificate.cells) {
    if (cell.nodes.size() < 3) continue;
    cell.nodes.pop_back();
    const CertificateCheck check = check_certificate(p.model, p.certificate);
    EXPECT_FALSE(check.holds);
    EXPECT_EQ(check.reason, "a cell's tree ends early");
    return;
  }
  FAIL() << "the link has no cell that was branched";
}

TEST(Certificate, FailsOnALinkWithABetterChannel) {
  const Proven p = proven_link();
  EyeModel better = p.model;
  for (StatePulses& state : better.states) state.victim = scaled(state.victim, 1.5);
  EXPECT_FALSE(check_certificate(better, p.certificate).holds);
}

TEST(Certificate, StaysABoundWhateverTheWeightsAre) {
  // Signs are free: with other weights the bound may be loose, never below what a setting reaches.
  Proven p = proven_link();
  const double best_v = p.certificate.bound_v;
  for (Certificate::Multipliers& m : p.certificate.multipliers) {
    if (m.weights.empty()) continue;
    const double even = 1.0 / static_cast<double>(m.weights.size());
    for (double& weight : m.weights) weight = even;
  }
  EXPECT_GE(check_certificate(p.model, p.certificate).bound_v, best_v - 1e-12);
}

TEST(Certificate, RefusesWeightsThatDoNotAddUp) {
  Proven p = proven_link();
  for (Certificate::Multipliers& m : p.certificate.multipliers) {
    if (!m.weights.empty()) m.weights.front() += 0.1;
  }
  const CertificateCheck check = check_certificate(p.model, p.certificate);
  EXPECT_FALSE(check.holds);
  EXPECT_NE(check.reason.find("weights add up to"), std::string::npos) << check.reason;
}

}  // namespace
}  // namespace tapwright

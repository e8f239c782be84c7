#include "tapwright/eye/line_code.hpp"

#include <Eigen/QR>
#include <algorithm>
#include <cassert>
#include <cmath>
#include <map>
#include <stdexcept>
#include <string_view>
#include <tuple>

#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

// Sub-blocks at negative running disparity, first bit sent first. At positive disparity the
// complement is sent where ones and zeros differ in number, and for the words marked in
// `alternate_`. Source: Widmer and Franaszek 1983, tables 1 and 2; IEEE 802.3 tables 36-1 and 36-2
// (from memory; the tests check counts, disparities, run lengths and published characters).
constexpr std::array<std::string_view, 32> kData6 = {
    "100111", "011101", "101101", "110001", "110101", "101001", "011001", "111000",
    "111001", "100101", "010101", "110100", "001101", "101100", "011100", "010111",
    "011011", "100011", "010011", "110010", "001011", "101010", "011010", "111010",
    "110011", "100110", "010110", "110110", "001110", "101110", "011110", "101011"};
constexpr std::string_view kControl6 = "001111";
constexpr std::array<std::string_view, 8> kData4 = {"1011", "1001", "0101", "1100",
                                                    "1101", "1010", "0110", "1110"};
constexpr std::string_view kAlternate7 = "0111";
constexpr std::array<std::string_view, 8> kControl4 = {"1011", "0110", "1010", "1100",
                                                       "1101", "0101", "1001", "0111"};

struct SubBlock {
  unsigned bits = 0;  // first symbol in bit 0
  int size = 0;
  int disparity = -1;  // after it
};

SubBlock sub_block(std::string_view at_negative, bool always_alternates, int disparity) {
  SubBlock out{0, static_cast<int>(at_negative.size()), disparity};
  const auto ones = std::count(at_negative.begin(), at_negative.end(), '1');
  const bool balanced = 2 * ones == out.size;
  const bool complement = disparity > 0 && (!balanced || always_alternates);
  for (int i = 0; i < out.size; ++i) {
    if ((at_negative[static_cast<std::size_t>(i)] == '1') != complement) out.bits |= 1U << i;
  }
  if (!balanced) out.disparity = -disparity;
  return out;
}

SubBlock data6(unsigned x, int disparity) { return sub_block(kData6[x], x == 7, disparity); }
SubBlock control6(int disparity) { return sub_block(kControl6, false, disparity); }
SubBlock data4(unsigned y, int disparity) { return sub_block(kData4[y], y == 3, disparity); }
SubBlock alternate7(int disparity) { return sub_block(kAlternate7, false, disparity); }
SubBlock control4(unsigned y, int disparity) { return sub_block(kControl4[y], true, disparity); }

// D.x.7 takes the alternate where the usual word would make a run of five; `disparity` is the one
// between the sub-blocks, which these balanced 6-bit words leave as it was.
bool needs_alternate7(unsigned x, int disparity) {
  return disparity < 0 ? x == 17 || x == 18 || x == 20 : x == 11 || x == 13 || x == 14;
}
bool is_other_control(unsigned x) { return x == 23 || x == 27 || x == 29 || x == 30; }

// Collects the words of a section, joins equal ones, and sorts them into branches.
class SectionBuilder {
 public:
  SectionBuilder(int num_symbols, int num_from, int num_to)
      : num_symbols_(num_symbols), num_from_(num_from), num_to_(num_to) {}

  void add(int from, int to, std::vector<double> symbols, double probability) {
    words_[{from, to, std::move(symbols)}] += probability;
  }
  void add_bits(int from, int to, unsigned bits, double probability) {
    std::vector<double> symbols(static_cast<std::size_t>(num_symbols_));
    for (std::size_t i = 0; i < symbols.size(); ++i) symbols[i] = (bits >> i & 1U) ? 1.0 : -1.0;
    add(from, to, std::move(symbols), probability);
  }

  [[nodiscard]] LineCode::Section build(int levels) const {
    LineCode::Section out;
    out.num_from = num_from_;
    out.num_to = num_to_;
    out.words.resize(num_symbols_, static_cast<Eigen::Index>(words_.size()));
    out.by_bits = levels == 2 && num_symbols_ <= 8;
    int index = 0;
    for (const auto& [word, probability] : words_) {
      const auto& [from, to, symbols] = word;
      if (out.branches.empty() || out.branches.back().from != from ||
          out.branches.back().to != to) {
        out.branches.push_back({from, to, index, index});
      }
      out.branches.back().last = index + 1;
      out.probability.push_back(probability);
      int bits = 0;
      for (int i = 0; i < num_symbols_; ++i) {
        out.words(i, index) = symbols[static_cast<std::size_t>(i)];
        if (out.by_bits && symbols[static_cast<std::size_t>(i)] > 0.0) bits |= 1 << i;
      }
      out.key.push_back(out.by_bits ? bits : index);
      ++index;
    }
    return out;
  }

 private:
  int num_symbols_;
  int num_from_;
  int num_to_;
  std::map<std::tuple<int, int, std::vector<double>>, double> words_;
};

Eigen::MatrixXd transition(const LineCode::Section& section) {
  Eigen::MatrixXd out = Eigen::MatrixXd::Zero(section.num_from, section.num_to);
  for (const LineCode::Branch& branch : section.branches) {
    for (int i = branch.first; i < branch.last; ++i) {
      out(branch.from, branch.to) += section.probability[static_cast<std::size_t>(i)];
    }
  }
  return out;
}

// The probabilities that a step through the whole character leaves as they are. Words of
// probability 0 can make states unreachable; what stays must be one closed set.
Eigen::VectorXd stationary(const Eigen::MatrixXd& step) {
  const Eigen::Index n = step.rows();
  Eigen::MatrixXd equations(n + 1, n);
  equations.topRows(n) = step.transpose() - Eigen::MatrixXd::Identity(n, n);
  equations.row(n).setOnes();
  Eigen::VectorXd right = Eigen::VectorXd::Zero(n + 1);
  right[n] = 1.0;
  const Eigen::ColPivHouseholderQR<Eigen::MatrixXd> solver(equations);
  if (solver.rank() < n) {
    throw std::invalid_argument(
        "line code: by the probabilities given the states fall apart into sets that never meet; "
        "give every state a way of probability > 0 to every other");
  }
  return solver.solve(right).cwiseMax(0.0);
}

std::vector<bool> reachable(const StateMachine& machine, bool backwards) {
  std::vector<bool> seen(static_cast<std::size_t>(machine.num_states), false);
  std::vector<int> open = {0};
  seen[0] = true;
  while (!open.empty()) {
    const int state = open.back();
    open.pop_back();
    for (const StateMachine::Edge& edge : machine.edges) {
      const int here = backwards ? edge.to : edge.from;
      const auto there = static_cast<std::size_t>(backwards ? edge.from : edge.to);
      if (here == state && !seen[there]) {
        seen[there] = true;
        open.push_back(static_cast<int>(there));
      }
    }
  }
  return seen;
}

double nearest_level(double symbol, int levels) {
  const double steps = levels - 1;
  return 2.0 * std::clamp(std::round((symbol + 1.0) / 2.0 * steps), 0.0, steps) / steps - 1.0;
}

// Uniform in [0, 1) from the generator's bits alone: the same on every standard library.
double uniform(std::mt19937_64& random) { return static_cast<double>(random() >> 11) * 0x1p-53; }

}  // namespace

LineCode::LineCode(std::vector<Section> sections, int levels, bool symmetric, bool independent)
    : sections_(std::move(sections)),
      levels_(levels),
      symmetric_(symmetric),
      independent_(independent) {
  Eigen::MatrixXd step = Eigen::MatrixXd::Identity(sections_[0].num_from, sections_[0].num_from);
  for (std::size_t s = 0; s < sections_.size(); ++s) {
    const Section& section = sections_[s];
    for (int i = 0; i < section.num_symbols(); ++i) places_.push_back({static_cast<int>(s), i});
    max_states_ = std::max({max_states_, section.num_from, section.num_to});
    max_keys_ = std::max(max_keys_, section.num_keys());
    max_symbols_ = std::max(max_symbols_, section.num_symbols());
    step = step * transition(section);
  }
  period_ = static_cast<int>(places_.size());
  Eigen::VectorXd state = stationary(step);
  for (const Section& section : sections_) {
    state_probability_.push_back(state);
    state = transition(section).transpose() * state;
  }
}

LineCode LineCode::none(int levels) {
  if (levels < 2) throw std::invalid_argument("line code: levels must be >= 2");
  SectionBuilder builder(1, 1, 1);
  for (int i = 0; i < levels; ++i) {
    builder.add(0, 0, {2.0 * i / (levels - 1) - 1.0}, 1.0 / levels);
  }
  return LineCode({builder.build(levels)}, levels, true, true);
}

LineCode LineCode::code_8b10b(bool with_controls) {
  // States between the sub-blocks: disparity (0 negative, 1 positive) + 2 * which 4-bit alphabet.
  enum Alphabet { kUsual = 0, kWithAlternate = 1, kOfK28 = 2, kSevenOnly = 3 };
  const auto index = [](int disparity) { return disparity > 0 ? 1 : 0; };
  SectionBuilder first(6, 2, 8);
  SectionBuilder second(4, 8, 2);
  for (const int disparity : {-1, 1}) {
    const int start = index(disparity);
    for (unsigned x = 0; x < 32; ++x) {
      const SubBlock word = data6(x, disparity);
      const int alphabet = needs_alternate7(x, word.disparity) ? kWithAlternate : kUsual;
      first.add_bits(start, index(word.disparity) + 2 * alphabet, word.bits, 1.0 / 32);
      if (with_controls && is_other_control(x)) {
        first.add_bits(start, index(word.disparity) + 2 * kSevenOnly, word.bits, 0.0);
      }
    }
    if (with_controls) {
      const SubBlock word = control6(disparity);
      first.add_bits(start, index(word.disparity) + 2 * kOfK28, word.bits, 0.0);
    }
    const auto add = [&](Alphabet alphabet, const SubBlock& word, double probability) {
      second.add_bits(start + 2 * alphabet, index(word.disparity), word.bits, probability);
    };
    for (unsigned y = 0; y < 8; ++y) {
      add(kUsual, data4(y, disparity), 1.0 / 8);
      add(kWithAlternate, y == 7 ? alternate7(disparity) : data4(y, disparity), 1.0 / 8);
      if (with_controls) add(kOfK28, control4(y, disparity), 1.0 / 8);
    }
    if (with_controls) add(kSevenOnly, control4(7, disparity), 1.0);
  }
  return LineCode({first.build(2), second.build(2)}, 2, true, false);
}

LineCode LineCode::code_64b66b() {
  SectionBuilder header(2, 1, 1);
  header.add(0, 0, {-1.0, 1.0}, 0.5);
  header.add(0, 0, {1.0, -1.0}, 0.5);
  std::vector<Section> sections(65, none().sections_[0]);
  sections[0] = header.build(2);
  return LineCode(std::move(sections), 2, true, false);
}

LineCode LineCode::manchester() {
  SectionBuilder builder(2, 1, 1);
  builder.add(0, 0, {-1.0, 1.0}, 0.5);
  builder.add(0, 0, {1.0, -1.0}, 0.5);
  return LineCode({builder.build(2)}, 2, true, false);
}

LineCode LineCode::machine(const StateMachine& machine, int levels) {
  const auto refuse = [](const std::string& what) {
    throw std::invalid_argument("line code: " + what);
  };
  if (levels < 2) refuse("levels must be >= 2");
  if (machine.num_states < 1 || machine.edges.empty()) refuse("it has no state or no edge");
  const std::size_t num_symbols = machine.edges[0].symbols.size();
  if (num_symbols == 0) refuse("edges[0] sends no symbol");
  SectionBuilder builder(static_cast<int>(num_symbols), machine.num_states, machine.num_states);
  std::vector<double> sum(static_cast<std::size_t>(machine.num_states), 0.0);
  for (std::size_t e = 0; e < machine.edges.size(); ++e) {
    const StateMachine::Edge& edge = machine.edges[e];
    const std::string name = "edges[" + std::to_string(e) + "]";
    for (const int state : {edge.from, edge.to}) {
      if (state < 0 || state >= machine.num_states) {
        refuse(name + " names state " + std::to_string(state) + " of 0 ... " +
               std::to_string(machine.num_states - 1));
      }
    }
    if (edge.symbols.size() != num_symbols) {
      refuse(name + " sends " + std::to_string(edge.symbols.size()) + " symbols, edges[0] " +
             std::to_string(num_symbols) + "; all words must be equally long");
    }
    std::vector<double> symbols = edge.symbols;
    for (double& symbol : symbols) {
      const double level = nearest_level(symbol, levels);
      if (!(std::abs(symbol - level) <= 1e-9)) {
        refuse(name + " holds the symbol " + exact(symbol) + ", which is none of the " +
               std::to_string(levels) + " levels from -1 to +1");
      }
      symbol = level;
    }
    if (!(edge.probability >= 0.0 && edge.probability <= 1.0 + 1e-9)) {
      refuse(name + " has probability " + exact(edge.probability) + ", which is not in 0 ... 1");
    }
    sum[static_cast<std::size_t>(edge.from)] += edge.probability;
    builder.add(edge.from, edge.to, std::move(symbols), edge.probability);
  }
  const std::vector<bool> onwards = reachable(machine, false);
  const std::vector<bool> back = reachable(machine, true);
  for (std::size_t s = 0; s < sum.size(); ++s) {
    if (!onwards[s] || !back[s]) {
      refuse("state " + std::to_string(s) +
             (onwards[s] ? " never leads back to state 0" : " can't be reached from state 0"));
    }
    if (!(std::abs(sum[s] - 1.0) <= 1e-9)) {
      refuse("the probabilities out of state " + std::to_string(s) + " add up to " + exact(sum[s]) +
             "; they must make 1");
    }
  }
  return LineCode({builder.build(levels)}, levels, false, false);
}

LineCode LineCode::from(const LineCodeSpec& spec, int levels) {
  const auto two_levels = [&](const char* name, LineCode code) {
    if (levels != 2) {
      throw std::invalid_argument(std::string("line code: ") + name +
                                  " has two levels, but the link has " + std::to_string(levels));
    }
    return code;
  };
  switch (spec.kind) {
    case LineCodeKind::kNone:
      return none(levels);
    case LineCodeKind::k8b10b:
      return two_levels("8b10b", code_8b10b());
    case LineCodeKind::k64b66b:
      return two_levels("64b66b", code_64b66b());
    case LineCodeKind::kManchester:
      return two_levels("manchester", manchester());
    case LineCodeKind::kStateMachine:
      return machine(spec.machine, levels);
  }
  throw std::invalid_argument("line code: unknown kind");
}

Character8b10b encode_8b10b(std::uint8_t byte, bool control, int disparity) {
  const unsigned x = byte & 31U;
  const unsigned y = byte >> 5U;
  if (disparity != -1 && disparity != 1) {
    throw std::invalid_argument("encode_8b10b: disparity = " + std::to_string(disparity) +
                                ", but it must be -1 or +1");
  }
  if (control && x != 28 && !(y == 7 && is_other_control(x))) {
    throw std::invalid_argument("encode_8b10b: there is no control character " +
                                name_8b10b(byte, true));
  }
  const SubBlock first = control && x == 28 ? control6(disparity) : data6(x, disparity);
  const SubBlock second = control ? control4(y, first.disparity)
                          : y == 7 && needs_alternate7(x, first.disparity)
                              ? alternate7(first.disparity)
                              : data4(y, first.disparity);
  Character8b10b out;
  for (unsigned i = 0; i < 10; ++i) {
    out.bits[i] = (i < 6 ? first.bits >> i : second.bits >> (i - 6)) & 1U;
  }
  out.disparity = second.disparity;
  return out;
}

std::string name_8b10b(std::uint8_t byte, bool control) {
  return (control ? "K" : "D") + std::to_string(byte & 31U) + "." + std::to_string(byte >> 5U);
}

std::vector<std::string> names_8b10b(const Eigen::VectorXd& levels) {
  const auto number = [](const auto& bit) {
    unsigned out = 0;
    for (unsigned i = 0; i < 10; ++i) out |= (bit(i) ? 1U : 0U) << i;
    return out;
  };
  struct Meaning {
    std::string name;
    int disparity_after = -1;
  };
  std::map<std::pair<int, unsigned>, Meaning> meanings;  // of (disparity before, bits)
  for (const int disparity : {-1, 1}) {
    for (unsigned b = 0; b < 512; ++b) {
      const auto byte = static_cast<std::uint8_t>(b);
      const bool control = b >= 256;
      const unsigned x = byte & 31U;
      if (control && x != 28 && !(byte >> 5U == 7 && is_other_control(x))) continue;
      const Character8b10b sent = encode_8b10b(byte, control, disparity);
      meanings[{disparity, number([&](unsigned i) { return sent.bits[i]; })}] = {
          name_8b10b(byte, control), sent.disparity};
    }
  }
  if (levels.size() % 10 != 0) return {};
  for (int disparity : {-1, 1}) {
    std::vector<std::string> names;
    for (Eigen::Index at = 0; at < levels.size(); at += 10) {
      const auto found = meanings.find(
          {disparity, number([&](unsigned i) { return levels[at + Eigen::Index{i}] > 0.0; })});
      if (found == meanings.end()) {
        names.clear();
        break;
      }
      names.push_back(found->second.name);
      disparity = found->second.disparity_after;
    }
    if (!names.empty()) return names;
  }
  return {};
}

Eigen::VectorXd random_stream(const LineCode& code, Eigen::Index num_characters,
                              std::mt19937_64& random) {
  // Branches are sorted by their state: those of a state stand side by side.
  const auto draw = [&](const LineCode::Section& section, int state, auto&& use) {
    double left = uniform(random);
    int chosen = -1;
    int to = 0;
    for (const LineCode::Branch& branch : section.branches) {
      if (branch.from != state) continue;
      for (int i = branch.first; i < branch.last; ++i) {
        const double probability = section.probability[static_cast<std::size_t>(i)];
        if (probability <= 0.0) continue;
        chosen = i;  // the last one also takes what rounding leaves over
        to = branch.to;
        left -= probability;
        if (left < 0.0) break;
      }
      if (left < 0.0) break;
    }
    assert(chosen >= 0);
    use(section.words.col(chosen));
    return to;
  };
  int state = 0;
  const Eigen::VectorXd& start = code.state_probability(0);
  for (double left = uniform(random) - start[0]; left >= 0.0 && state + 1 < start.size();) {
    left -= start[++state];
  }
  Eigen::VectorXd out(num_characters * code.period());
  Eigen::Index next = 0;
  for (Eigen::Index c = 0; c < num_characters; ++c) {
    for (const LineCode::Section& section : code.sections()) {
      state = draw(section, state, [&](const auto& word) {
        out.segment(next, word.size()) = word;
        next += word.size();
      });
    }
  }
  return out;
}

}  // namespace tapwright

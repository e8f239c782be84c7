#include "tapwright/channel/pattern.hpp"

#include <array>
#include <bit>
#include <cmath>
#include <stdexcept>
#include <string>
#include <unordered_map>

#include "tapwright/base/text.hpp"

namespace tapwright {
namespace {

struct Recipe {
  int order;
  std::uint32_t taps;  ///< bit a - 1 set: x(n - a) takes part
  bool inverted;
};

constexpr std::uint32_t tap(int a) { return std::uint32_t{1} << (a - 1); }

constexpr std::array<Recipe, 8> kRecipes{{{7, tap(7) | tap(6), false},
                                          {9, tap(9) | tap(5), false},
                                          {11, tap(11) | tap(9), false},
                                          {13, tap(13) | tap(12) | tap(2) | tap(1), false},
                                          {15, tap(15) | tap(14), true},
                                          {20, tap(20) | tap(3), false},
                                          {23, tap(23) | tap(18), true},
                                          {31, tap(31) | tap(28), true}}};

const Recipe& recipe(int order) {
  for (const Recipe& r : kRecipes) {
    if (r.order == order) return r;
  }
  throw std::invalid_argument("prbs: order " + std::to_string(order) +
                              " is not one of 7, 9, 11, 13, 15, 20, 23, 31");
}

std::uint32_t all_ones(int order) { return (std::uint32_t{1} << order) - 1; }

/// State: bit a - 1 holds x(n - a). The step shifts x(n) in at bit 0.
std::uint32_t next_bit(const Recipe& r, std::uint32_t state) {
  return static_cast<std::uint32_t>(std::popcount(state & r.taps) & 1);
}

std::uint32_t stepped(const Recipe& r, std::uint32_t state) {
  return ((state << 1) | next_bit(r, state)) & all_ones(r.order);
}

/// A linear map of states over GF(2): what becomes of each single bit.
using Map = std::array<std::uint32_t, 31>;

std::uint32_t applied(const Map& map, std::uint32_t state) {
  std::uint32_t out = 0;
  for (; state != 0; state &= state - 1) {
    out ^= map[static_cast<std::size_t>(std::countr_zero(state))];
  }
  return out;
}

/// The map of `count` steps, by repeated squaring.
Map steps(const Recipe& r, std::int64_t count) {
  Map power{}, total{};
  for (int i = 0; i < r.order; ++i) {
    const auto index = static_cast<std::size_t>(i);
    total[index] = std::uint32_t{1} << i;
    power[index] = stepped(r, total[index]);
  }
  const auto after = [&](const Map& second, const Map& first) {
    Map out{};
    for (std::size_t i = 0; i < static_cast<std::size_t>(r.order); ++i) {
      out[i] = applied(second, first[i]);
    }
    return out;
  };
  for (; count > 0; count >>= 1) {
    if (count & 1) total = after(power, total);
    power = after(power, power);
  }
  return total;
}

std::int64_t bit_period(int order) { return (std::int64_t{1} << order) - 1; }

std::int64_t reduced(std::int64_t index, std::int64_t length) {
  const std::int64_t rest = index % length;
  return rest < 0 ? rest + length : rest;
}

}  // namespace

Result<Pattern> pattern_named(std::string_view name, std::string_view label) {
  const std::string word = lowercase(name);
  if (word == "prbs13q") return {Pattern(Prbs{13, true}), {}};
  std::vector<std::string> names{"prbs13q"};
  for (const Recipe& r : kRecipes) {
    names.push_back("prbs" + std::to_string(r.order));
    if (word == names.back()) return {Pattern(Prbs{r.order, false}), {}};
  }
  const std::optional<std::string> near = nearest_word(word, names);
  return failure<Pattern>(
      error_at(std::string(label), 0,
               "found the pattern " + shown_text(name) +
                   "; wanted prbs7, prbs9, prbs11, prbs13, prbs15, prbs20, prbs23, prbs31, prbs13q "
                   "or a list of symbols" +
                   (near ? "; did you mean " + *near + "?" : "")));
}

std::int64_t period(const Pattern& pattern) {
  if (const auto* prbs = std::get_if<Prbs>(&pattern)) return bit_period(recipe(prbs->order).order);
  const auto size = static_cast<std::int64_t>(std::get<SymbolList>(pattern).levels.size());
  if (size == 0) throw std::invalid_argument("period: the list of symbols is empty");
  return size;
}

std::vector<std::uint8_t> prbs_bits(int order, std::int64_t first, std::int64_t count) {
  const Recipe& r = recipe(order);
  std::uint32_t state = applied(steps(r, reduced(first, bit_period(order))), all_ones(order));
  std::vector<std::uint8_t> bits(static_cast<std::size_t>(count));
  for (std::uint8_t& bit : bits) {
    bit = static_cast<std::uint8_t>(next_bit(r, state) ^ (r.inverted ? 1u : 0u));
    state = stepped(r, state);
  }
  return bits;
}

Eigen::VectorXd symbols(const Pattern& pattern, std::int64_t first, Eigen::Index count) {
  const std::int64_t length = period(pattern);
  Eigen::VectorXd levels(count);
  if (const auto* prbs = std::get_if<Prbs>(&pattern)) {
    const std::int64_t start = reduced(first, length);
    const int per_symbol = prbs->pam4 ? 2 : 1;
    const std::vector<std::uint8_t> bits =
        prbs_bits(prbs->order, start * per_symbol, std::int64_t{count} * per_symbol);
    for (Eigen::Index k = 0; k < count; ++k) {
      const auto i = static_cast<std::size_t>(k * per_symbol);
      if (prbs->pam4) {
        const int gray = bits[i] == 0 ? bits[i + 1] : 3 - bits[i + 1];
        levels[k] = (2.0 * gray - 3.0) / 3.0;
      } else {
        levels[k] = bits[i] == 0 ? -1.0 : 1.0;
      }
    }
    return levels;
  }
  const std::vector<double>& list = std::get<SymbolList>(pattern).levels;
  for (Eigen::Index k = 0; k < count; ++k) {
    levels[k] = list[static_cast<std::size_t>(reduced(first + k, length))];
  }
  return levels;
}

std::optional<std::int64_t> prbs_index(int order, const std::vector<std::uint8_t>& bits) {
  const Recipe& r = recipe(order);
  if (bits.size() < static_cast<std::size_t>(order)) {
    throw std::invalid_argument("prbs_index: wanted at least `order` bits");
  }
  // The state just behind the first `order` bits.
  std::uint32_t state = 0;
  for (int i = 0; i < order; ++i) {
    const std::uint32_t bit = bits[static_cast<std::size_t>(i)] ^ (r.inverted ? 1u : 0u);
    state = (state << 1) | bit;
  }
  if (state == 0) return std::nullopt;
  const std::uint32_t behind = state;
  for (std::size_t i = static_cast<std::size_t>(order); i < bits.size(); ++i) {
    if ((next_bit(r, state) ^ (r.inverted ? 1u : 0u)) != bits[i]) return std::nullopt;
    state = stepped(r, state);
  }
  // Baby steps and giant steps: state = step^(i * big - j) of the start, with i, j small.
  const std::int64_t length = bit_period(order);
  const auto big = static_cast<std::int64_t>(std::ceil(std::sqrt(static_cast<double>(length))));
  std::unordered_map<std::uint32_t, std::int64_t> babies;
  babies.reserve(static_cast<std::size_t>(big));
  std::uint32_t baby = behind;
  for (std::int64_t j = 0; j < big; ++j) {
    babies.emplace(baby, j);
    baby = stepped(r, baby);
  }
  const Map giant = steps(r, big);
  std::uint32_t reached = all_ones(order);
  for (std::int64_t i = 0; i <= big; ++i) {
    if (const auto found = babies.find(reached); found != babies.end()) {
      return reduced(i * big - found->second - order, length);
    }
    reached = applied(giant, reached);
  }
  return std::nullopt;
}

}  // namespace tapwright

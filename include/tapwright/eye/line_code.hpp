#pragma once
// Line codes as one thing: a trellis whose words are sent symbol by symbol.

#include <Eigen/Core>
#include <array>
#include <cstdint>
#include <random>
#include <string>
#include <vector>

#include "tapwright/link/link.hpp"

namespace tapwright {

/// A line code: the character is cut into sections, and in each section a state has words that lead
/// to a state of the next. After the last section the first follows again.
///
///     none        1 section of 1 symbol, 1 state
///     8b10b       5b/6b and 3b/4b sub-block; states at the character's start: the two running
///                 disparities; in between: disparity and which 4-bit alphabet follows
///     64b66b      the sync header 01 or 10, then 64 sections of one free symbol: after scrambling
///                 every payload can occur and is as likely as any other, so symbols are
///                 independent but for the header, whose transition keeps runs to 66 symbols
///     manchester  01 or 10, 1 state
///     machine     1 section, as given
///
/// Units:  symbols are levels in [-1, +1]; bit 1 is +1.
/// Source: 8b10b: A. X. Widmer, P. A. Franaszek, IBM J. Res. Dev. 27(5), 1983, and IEEE 802.3
///         clause 36; 64b66b: IEEE 802.3 clause 49; Manchester: IEEE 802.3 clause 7.
class LineCode {
 public:
  /// Words first ... last - 1 of the section lead from state `from` to state `to`.
  struct Branch {
    int from = 0;
    int to = 0;
    int first = 0;
    int last = 0;
  };
  struct Section {
    int num_from = 1;
    int num_to = 1;
    std::vector<Branch> branches;
    Eigen::MatrixXd words;            ///< (num symbols, num words); a column in the order sent
    std::vector<double> probability;  ///< (num words), given the state; 0 = sent on request only
    /// Two levels and at most 8 symbols: `key` holds the word's bits, the first symbol in bit 0;
    /// else the index of the word. It names the word's place in a table of sums.
    bool by_bits = false;
    std::vector<int> key;
    [[nodiscard]] int num_symbols() const { return static_cast<int>(words.rows()); }
    [[nodiscard]] int num_keys() const {
      return by_bits ? 1 << num_symbols() : static_cast<int>(words.cols());
    }
  };

  /// Every symbol of every level, independent and equally likely. Errors: levels < 2.
  [[nodiscard]] static LineCode none(int levels = 2);
  /// 256 data characters and, unless left out, the 12 control characters, which may stand anywhere
  /// but are not part of random data.
  [[nodiscard]] static LineCode code_8b10b(bool with_controls = true);
  [[nodiscard]] static LineCode code_64b66b();
  [[nodiscard]] static LineCode manchester();
  /// Errors: std::invalid_argument, naming the edge, if the machine has no edge, a state that can't
  ///         be left or reached from every other, words of different length or of length 0, a
  ///         symbol that is none of the `levels`, or probabilities that are negative or don't add
  ///         up to 1 for each state (1e-9).
  [[nodiscard]] static LineCode machine(const StateMachine& machine, int levels = 2);
  /// Errors: as above, and if the code is for two levels only and `levels` is another number.
  [[nodiscard]] static LineCode from(const LineCodeSpec& spec, int levels);

  [[nodiscard]] const std::vector<Section>& sections() const { return sections_; }
  /// Symbols in one character: the number of positions the main cursor can have.
  [[nodiscard]] int period() const { return period_; }
  /// Turning every symbol's sign gives a sequence of the code, as likely as the first.
  [[nodiscard]] bool symmetric() const { return symmetric_; }
  [[nodiscard]] bool independent() const { return independent_; }
  [[nodiscard]] int levels() const { return levels_; }
  [[nodiscard]] int max_states() const { return max_states_; }
  [[nodiscard]] int max_keys() const { return max_keys_; }
  [[nodiscard]] int max_symbols() const { return max_symbols_; }
  /// Probability of each state at the start of section `section_index` in endless random data.
  [[nodiscard]] const Eigen::VectorXd& state_probability(std::size_t section_index) const {
    return state_probability_[section_index];
  }
  /// The section in which the symbol at `position` lies, and its place there.
  struct Place {
    int section = 0;
    int offset = 0;
  };
  [[nodiscard]] Place place(int position) const {
    return places_[static_cast<std::size_t>(position)];
  }

 private:
  LineCode(std::vector<Section> sections, int levels, bool symmetric, bool independent);

  std::vector<Section> sections_;
  std::vector<Eigen::VectorXd> state_probability_;
  std::vector<Place> places_;
  int period_ = 0;
  int levels_ = 2;
  int max_states_ = 0;
  int max_keys_ = 0;
  int max_symbols_ = 0;
  bool symmetric_ = true;
  bool independent_ = false;
};

/// One 8b10b character as sent: bits a b c d e i f g h j, a first, and the running disparity after.
struct Character8b10b {
  std::array<bool, 10> bits{};
  int disparity = -1;
};

/// The character for a byte (HGF EDCBA, A the least bit) at running disparity -1 or +1.
///
/// Errors: std::invalid_argument if `disparity` is neither, or if `control` and the byte is none of
///         K28.0 ... K28.7, K23.7, K27.7, K29.7, K30.7.
[[nodiscard]] Character8b10b encode_8b10b(std::uint8_t byte, bool control, int disparity);

/// Name of a character, such as "D21.5" or "K28.5".
[[nodiscard]] std::string name_8b10b(std::uint8_t byte, bool control);

/// The characters of a stretch of levels that begins with one, from whichever disparity fits.
///
/// Shape: levels is (10 n); positive counts as 1. Empty when it is no such stretch, or n is 0.
[[nodiscard]] std::vector<std::string> names_8b10b(const Eigen::VectorXd& levels);

/// A stretch of random data, `num_characters` whole characters from a random state.
///
/// Shape: the result is (num_characters * period), levels in the order sent.
[[nodiscard]] Eigen::VectorXd random_stream(const LineCode& code, Eigen::Index num_characters,
                                            std::mt19937_64& random);

}  // namespace tapwright

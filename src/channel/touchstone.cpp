#include "tapwright/channel/touchstone.hpp"

#include <Eigen/LU>
#include <algorithm>
#include <array>
#include <charconv>
#include <cmath>
#include <limits>
#include <numbers>
#include <stdexcept>

#include "channel/input_stream.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/channel/text_file.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;

constexpr int kMaxPorts = 256;
constexpr std::size_t kMaxErrors = 20;

constexpr bool is_blank(char c) { return c == ' ' || c == '\t' || c == '\v' || c == '\f'; }

/// Cuts text into lines that end in LF, CR LF or CR.
class Lines {
 public:
  explicit Lines(std::string_view text) : text_(text), feed_(text.find('\n')) {}
  bool next(std::string_view& line) {
    if (at_ >= text_.size()) return false;
    // The next line feed is kept, lest a text of bare CRs be searched to its end for each line.
    if (feed_ != std::string_view::npos && feed_ < at_) feed_ = text_.find('\n', at_);
    const std::size_t end = std::min(feed_, text_.size());
    line = text_.substr(at_, end - at_);
    const std::size_t carriage = line.find('\r');
    if (carriage != std::string_view::npos && at_ + carriage + 1 != feed_) {
      line = line.substr(0, carriage);
      at_ += carriage + 1;
    } else {
      line = line.substr(0, carriage);
      at_ = end + 1;
    }
    ++number_;
    return true;
  }
  [[nodiscard]] int number() const { return number_; }

 private:
  std::string_view text_;
  std::size_t feed_;
  std::size_t at_ = 0;
  int number_ = 0;
};

/// The line without its comment and outer blanks.
std::string_view content(std::string_view line) {
  // Data lines are long and mostly free of comments; memchr under find is quick.
  line = line.substr(0, line.find('!'));
  while (!line.empty() && is_blank(line.front())) line.remove_prefix(1);
  while (!line.empty() && is_blank(line.back())) line.remove_suffix(1);
  return line;
}

/// Takes the next word off the front of `text`; empty at its end.
std::string_view next_word(std::string_view& text) {
  std::size_t begin = 0;
  while (begin < text.size() && is_blank(text[begin])) ++begin;
  std::size_t end = begin;
  while (end < text.size() && !is_blank(text[end])) ++end;
  const std::string_view word = text.substr(begin, end - begin);
  text.remove_prefix(end);
  return word;
}

Index count_words(std::string_view text) {
  Index count = 0;
  bool inside = false;
  for (const char c : text) {
    const bool blank = is_blank(c);
    count += !blank && !inside;
    inside = !blank;
  }
  return count;
}

/// The decimal number times 10^power, rounded once: 1.1 GHz is 1100000000 Hz to the last bit, which
/// 1.1 * 1e9 need not be.
std::optional<double> parse_shifted(std::string_view word, int power) {
  if (power == 0) return parse_number(word);
  const std::size_t mark = word.find_first_of("eE");
  long long exponent = power;
  if (mark != std::string_view::npos) {
    const auto given = parse_integer(word.substr(mark + 1));
    if (!given || std::abs(*given) > 100000) return std::nullopt;
    exponent += *given;
  }
  return parse_number(std::string(word.substr(0, mark)) + "e" + std::to_string(exponent));
}

std::string_view name_of_unit(int power) {
  return power == 0 ? "Hz" : power == 3 ? "kHz" : power == 6 ? "MHz" : "GHz";
}

std::string number_list(std::string_view noun, Index count) {
  return std::to_string(count) + " " + std::string(noun) + (count == 1 ? "" : "s");
}

enum class Format { kRealImaginary, kMagnitudeAngle, kDecibelAngle };
enum class MatrixFormat { kFull, kLower, kUpper };

/// One mode of [Mixed-Mode Order].
struct Mode {
  char kind = 'S';  ///< S, D or C
  int first = 0;    ///< 1-based port; the + side of a pair
  int second = 0;   ///< 0 for S
};

const std::vector<std::string> kKeywords = {"[version]",
                                            "[number of ports]",
                                            "[two-port data order]",
                                            "[two-port order]",
                                            "[number of frequencies]",
                                            "[number of noise frequencies]",
                                            "[reference]",
                                            "[matrix format]",
                                            "[mixed-mode order]",
                                            "[network data]",
                                            "[noise data]",
                                            "[end]",
                                            "[begin information]",
                                            "[end information]"};

/// Takes text in pieces of whole lines.
class Reader {
 public:
  Reader(std::string_view file, std::optional<int> num_ports)
      : file_(file), given_ports_(num_ports) {}

  /// The first piece holds the first point whole, if it can; `share` is its part of the text.
  void begin(std::string_view piece, double share) {
    if (piece.starts_with("\xEF\xBB\xBF")) piece.remove_prefix(3);
    if (piece.starts_with("\xFF\xFE") || piece.starts_with("\xFE\xFF")) {
      return fatal(1, "found UTF-16 text; wanted plain ASCII or UTF-8");
    }
    if (given_ports_ && (*given_ports_ < 1 || *given_ports_ > kMaxPorts)) {
      return fatal(0, "found " + std::to_string(*given_ports_) + " ports; wanted 1 to " +
                          std::to_string(kMaxPorts));
    }
    survey(piece);
    if (share < 1.0) {
      num_words_ = static_cast<Index>(1.02 * static_cast<double>(num_words_) / share);
    }
    add(piece);
  }

  void add(std::string_view piece) {
    Lines lines(piece);
    std::string_view line;
    const int lines_before = line_;
    while (wants_more() && lines.next(line)) {
      line_ = lines_before + lines.number();
      take(content(line));
    }
  }

  [[nodiscard]] bool failed() const { return stop_ && num_errors_ > 0; }
  [[nodiscard]] bool wants_more() const { return !stop_ && section_ != Section::kEnd; }

  Result<Network> finish() {
    if (!stop_) close();
    if (num_errors_ > 0) return {std::nullopt, std::move(notes_)};
    return {std::move(network_), std::move(notes_)};
  }

 private:
  enum class Section { kHeader, kInformation, kNetwork, kNoise, kEnd };

  // Notes ------------------------------------------------------------------------------------

  void error(int line, std::string message) {
    if (num_errors_ == kMaxErrors) {
      stop_ = true;
      return;
    }
    ++num_errors_;
    notes_.push_back(error_at(std::string(file_), line, std::move(message)));
  }
  void fatal(int line, std::string message) {
    error(line, std::move(message));
    stop_ = true;
  }
  void warning(int line, std::string message) {
    notes_.push_back(warning_at(std::string(file_), line, std::move(message)));
  }

  // Survey -----------------------------------------------------------------------------------

  /// One quick pass: how many numbers the piece can hold at most, which sizes the storage, and how
  /// many the first point has, which gives the number of ports where nothing else does. Every
  /// point opens with a frequency, so that its first line holds an odd count and the others an
  /// even one.
  void survey(std::string_view piece) {
    Lines lines(piece);
    std::string_view line;
    bool first_point_ended = false;
    while (lines.next(line)) {
      const std::string_view data = content(line);
      if (data.empty() || data.front() == '#' || data.front() == '[') continue;
      const Index count = count_words(data);
      num_words_ += count;
      if (first_point_ended) continue;
      if (first_point_words_ > 0 && count % 2 != 0) {
        first_point_ended = true;
      } else {
        first_point_words_ += count;
      }
    }
  }

  [[nodiscard]] static std::optional<int> ports_of_words(Index words) {
    for (int n = 1; n <= kMaxPorts; ++n) {
      if (words == 1 + 2 * Index{n} * n) return n;
    }
    return std::nullopt;
  }

  // Lines ------------------------------------------------------------------------------------

  void take(std::string_view line) {
    if (line.empty()) return;
    if (section_ == Section::kInformation) {
      if (lowercase(line) == "[end information]") section_ = Section::kHeader;
      return;
    }
    if (line.front() == '[') return keyword(line);
    if (line.front() == '#') return option_line(line.substr(1));
    if (section_ == Section::kHeader) {
      if (wanted_references_ > 0) return reference_values(line);
      if (wanted_modes_ > 0) return mode_names(line);
      if (version_ == 2) {
        if (!complained_of_stray_data_) {
          error(line_,
                "found " + shown_text(line, 30) + " before [Network Data]; wanted a keyword");
        }
        complained_of_stray_data_ = true;
        return;
      }
      begin_network();
      if (stop_) return;
    }
    if (section_ == Section::kNoise) return noise_line(line);
    data_line(line);
  }

  void option_line(std::string_view line) {
    if (has_options_) {
      warning(line_, "found a second option line; it is ignored, as the specification asks");
      return;
    }
    if (section_ != Section::kHeader) {
      error(line_, "found the option line after the first data; wanted it before");
      return;
    }
    has_options_ = true;
    options_line_ = line_;
    for (std::string_view word = next_word(line); !word.empty(); word = next_word(line)) {
      const std::string lower = lowercase(word);
      if (lower == "hz") {
        frequency_power_ = 0;
      } else if (lower == "khz") {
        frequency_power_ = 3;
      } else if (lower == "mhz") {
        frequency_power_ = 6;
      } else if (lower == "ghz") {
        frequency_power_ = 9;
      } else if (lower.size() == 1 && std::string_view("syzhg").find(lower) != std::string::npos) {
        parameter_ = lower.front();
      } else if (lower == "ri") {
        format_ = Format::kRealImaginary;
      } else if (lower == "ma") {
        format_ = Format::kMagnitudeAngle;
      } else if (lower == "db") {
        format_ = Format::kDecibelAngle;
      } else if (lower == "r") {
        const std::string_view value = next_word(line);
        const auto ohm = parse_number(value);
        if (!ohm || *ohm <= 0) {
          error(line_, value.empty()
                           ? "found R without a number; wanted a resistance in ohm, such as R 50"
                           : "found R " + shown_text(value) + "; wanted a resistance > 0 in ohm");
        } else {
          option_reference_ = *ohm;
        }
      } else {
        error(line_, "found " + shown_text(word) +
                         " in the option line; wanted Hz, kHz, MHz or GHz, S, Y, Z, H or G, RI, MA "
                         "or DB, or R and a number");
      }
    }
  }

  // Version 2 keywords -----------------------------------------------------------------------

  void keyword(std::string_view line) {
    const std::size_t end = line.find(']');
    if (end == std::string_view::npos) {
      error(line_, "found " + shown_text(line) + "; wanted a ']' that ends the keyword");
      return;
    }
    // Blanks inside the brackets vary; one of each run counts.
    std::string name = "[";
    std::string_view inner = line.substr(1, end - 1);
    for (std::string_view word = next_word(inner); !word.empty(); word = next_word(inner)) {
      if (name.size() > 1) name += ' ';
      name += lowercase(word);
    }
    name += ']';
    std::string_view rest = line.substr(end + 1);

    if (std::find(kKeywords.begin(), kKeywords.end(), name) == kKeywords.end()) {
      const auto near = nearest_word(name, kKeywords);
      error(line_, shown_text(line.substr(0, end + 1)) + " is not a known keyword" +
                       (near ? "; did you mean " + *near + "?" : ""));
      return;
    }
    unfinished_list();
    if (name == "[version]") {
      const std::string_view value = next_word(rest);
      if (value == "1.0" || value == "1.1") return;
      if (value != "2.0" && value != "2.1") {
        fatal(line_, "found version " + shown_text(value) + "; wanted 2.0");
        return;
      }
      if (section_ != Section::kHeader || has_options_) {
        fatal(line_, "found [Version] after other content; wanted it first");
      }
      version_ = 2;
      return;
    }
    if (version_ != 2) {
      if (!complained_of_version_) {
        error(line_, "found " + shown_text(line.substr(0, end + 1)) +
                         " without [Version] 2.0 at the top; wanted that keyword first");
      }
      complained_of_version_ = true;
      return;
    }
    if (name == "[begin information]") {
      section_ = Section::kInformation;
    } else if (name == "[network data]") {
      begin_network();
    } else if (name == "[noise data]") {
      end_network();
      section_ = Section::kNoise;
    } else if (name == "[end]") {
      section_ = Section::kEnd;
      has_end_ = true;
    } else if (section_ != Section::kHeader) {
      error(line_, "found " + name + " after the data began; wanted it before [Network Data]");
    } else {
      header_keyword(name, rest);
    }
  }

  void header_keyword(const std::string& name, std::string_view rest) {
    if (name == "[number of ports]") {
      const auto value = count_after(name, rest, kMaxPorts);
      if (!value) return;
      num_ports_ = static_cast<int>(*value);
      const auto by_name = ports_from_file_name(file_);
      if (by_name && *by_name != num_ports_) {
        warning(line_, "the file's name says " + number_list("port", *by_name) + ", the keyword " +
                           number_list("port", num_ports_) + "; the keyword counts");
      }
    } else if (name == "[number of frequencies]") {
      num_frequencies_ = count_after(name, rest, std::numeric_limits<int>::max());
    } else if (name == "[number of noise frequencies]") {
      num_noise_frequencies_ = count_after(name, rest, std::numeric_limits<int>::max());
    } else if (name == "[two-port data order]" || name == "[two-port order]") {
      const std::string_view value = next_word(rest);
      if (value != "12_21" && value != "21_12") {
        error(line_, "found two-port order " + shown_text(value) + "; wanted 12_21 or 21_12");
      } else {
        two_port_order_ = value == "12_21" ? 12 : 21;
      }
    } else if (name == "[matrix format]") {
      const std::string value = lowercase(next_word(rest));
      if (value == "full") {
        matrix_format_ = MatrixFormat::kFull;
      } else if (value == "lower") {
        matrix_format_ = MatrixFormat::kLower;
      } else if (value == "upper") {
        matrix_format_ = MatrixFormat::kUpper;
      } else {
        error(line_, "found matrix format " + shown_text(value) + "; wanted Full, Lower or Upper");
      }
    } else if (!ports_known(name)) {
      return;
    } else if (name == "[reference]") {
      references_.clear();
      wanted_references_ = num_ports_;
      list_line_ = line_;
      reference_values(rest);
    } else if (name == "[mixed-mode order]") {
      modes_.clear();
      wanted_modes_ = num_ports_;
      list_line_ = line_;
      mode_names(rest);
    }
  }

  bool ports_known(const std::string& name) {
    if (num_ports_ > 0) return true;
    error(line_, "found " + name + " before [Number of Ports]; wanted it after");
    return false;
  }

  std::optional<long long> count_after(const std::string& name, std::string_view rest,
                                       long long largest) {
    const std::string_view word = next_word(rest);
    const auto value = parse_integer(word);
    if (value && *value >= 1 && *value <= largest) return value;
    error(line_, "found " + name + " " + shown_text(word) + "; wanted a whole number from 1 to " +
                     std::to_string(largest));
    return std::nullopt;
  }

  void reference_values(std::string_view line) {
    for (std::string_view word = next_word(line); !word.empty(); word = next_word(line)) {
      const auto ohm = parse_number(word);
      if (!ohm || *ohm <= 0) {
        error(line_, "found reference " + shown_text(word) + "; wanted a resistance > 0 in ohm");
      }
      if (wanted_references_ == 0) {
        error(line_,
              "found more than " + number_list("reference", num_ports_) + "; wanted one a port");
        return;
      }
      references_.push_back(ohm && *ohm > 0 ? *ohm : 50.0);
      --wanted_references_;
    }
  }

  void mode_names(std::string_view line) {
    for (std::string_view word = next_word(line); !word.empty(); word = next_word(line)) {
      if (wanted_modes_ == 0) {
        error(line_, "found more than " + number_list("mode", num_ports_) + "; wanted one a port");
        return;
      }
      --wanted_modes_;
      const std::string upper_case = lowercase(word);
      const char kind = static_cast<char>(upper_case.front() - 'a' + 'A');
      const std::string_view ports = std::string_view(upper_case).substr(1);
      const std::size_t comma = ports.find(',');
      const auto first = parse_integer(ports.substr(0, comma));
      const auto second = comma == std::string_view::npos ? std::optional<long long>(0)
                                                          : parse_integer(ports.substr(comma + 1));
      const bool pair = kind == 'D' || kind == 'C';
      const auto in_range = [&](long long p) { return p >= 1 && p <= num_ports_; };
      if ((!pair && kind != 'S') || !first || !second || !in_range(*first) ||
          (pair != (comma != std::string_view::npos)) ||
          (pair && (!in_range(*second) || *second == *first))) {
        error(line_, "found mode " + shown_text(word) +
                         "; wanted S1, D1,2 or C1,2 with ports 1 to " + std::to_string(num_ports_));
        continue;
      }
      modes_.push_back({kind, static_cast<int>(*first), static_cast<int>(*second)});
    }
  }

  /// A list of [Reference] or [Mixed-Mode Order] that the next keyword cut short.
  void unfinished_list() {
    if (wanted_references_ > 0) {
      error(list_line_, "found " + number_list("reference", num_ports_ - wanted_references_) +
                            "; wanted " + std::to_string(num_ports_) + ", one a port");
    }
    if (wanted_modes_ > 0) {
      error(list_line_, "found " + number_list("mode", num_ports_ - wanted_modes_) + "; wanted " +
                            std::to_string(num_ports_) + ", one a port");
    }
    wanted_references_ = 0;
    wanted_modes_ = 0;
  }

  /// Each pair must stand as D and as C with the same ports, and each port once.
  void check_modes() {
    std::vector<int> uses(static_cast<std::size_t>(num_ports_) + 1, 0);
    for (const Mode& mode : modes_) {
      ++uses[static_cast<std::size_t>(mode.first)];
      if (mode.kind == 'S') {
        ++uses[static_cast<std::size_t>(mode.first)];
        continue;
      }
      ++uses[static_cast<std::size_t>(mode.second)];
      const auto partner = std::count_if(modes_.begin(), modes_.end(), [&](const Mode& other) {
        return other.kind != mode.kind && other.first == mode.first && other.second == mode.second;
      });
      if (partner != 1) {
        const std::string ports = std::to_string(mode.first) + "," + std::to_string(mode.second);
        error(list_line_, std::string("found ") + mode.kind + ports + " without one " +
                              (mode.kind == 'D' ? "C" : "D") + ports + "; wanted both");
        return;
      }
      const auto reference = [&](int port) {
        return references_[static_cast<std::size_t>(port - 1)];
      };
      if (reference(mode.first) != reference(mode.second)) {
        error(list_line_, "found references of " + exact(reference(mode.first)) + " and " +
                              exact(reference(mode.second)) + " ohm at ports " +
                              std::to_string(mode.first) + " and " + std::to_string(mode.second) +
                              "; a mixed-mode pair needs equal ones");
        return;
      }
    }
    for (int port = 1; port <= num_ports_; ++port) {
      if (uses[static_cast<std::size_t>(port)] != 2) {
        error(list_line_, "found port " + std::to_string(port) +
                              " in no mode or in several; wanted each port once");
        return;
      }
    }
  }

  // Data -------------------------------------------------------------------------------------

  void begin_network() {
    if (section_ == Section::kNetwork || network_begun_) {
      fatal(line_, "found a second [Network Data]; wanted one");
      return;
    }
    section_ = Section::kNetwork;
    network_begun_ = true;
    if (!has_options_) {
      warning(line_, "found no option line before the data; took the default, # GHz S MA R 50");
    }
    if (version_ == 2) {
      if (num_ports_ == 0) return fatal(line_, "found no valid [Number of Ports]; wanted it");
      if (num_ports_ == 2 && two_port_order_ == 0) {
        error(line_, "found no valid [Two-Port Data Order]; wanted 12_21 or 21_12");
      }
      if (!num_frequencies_) {
        error(line_, "found no valid [Number of Frequencies]; wanted it before the data");
      }
    } else {
      by_name_ = given_ports_ ? given_ports_ : ports_from_file_name(file_);
      const auto by_layout = ports_of_words(first_point_words_);
      if (by_name_ && (*by_name_ < 1 || *by_name_ > kMaxPorts)) {
        return fatal(0, "found " + std::to_string(*by_name_) + " ports in the name; wanted 1 to " +
                            std::to_string(kMaxPorts));
      }
      if (!by_name_ && !by_layout) {
        return fatal(line_, "found " + number_list("number", first_point_words_) +
                                " in the first point, which fit no number of ports (wanted 1 + 2 x "
                                "ports x ports); name the file .sNp for N ports");
      }
      if (!by_name_) {
        warning(line_, "the file's name tells no number of ports; took " +
                           std::to_string(*by_layout) + " from the first point");
      }
      num_ports_ = by_name_ ? *by_name_ : *by_layout;
      two_port_order_ = 21;
    }
    if ((parameter_ == 'h' || parameter_ == 'g') && num_ports_ != 2) {
      return fatal(options_line_, std::string("found ") + (parameter_ == 'h' ? 'H' : 'G') +
                                      "-parameters with " + number_list("port", num_ports_) +
                                      "; they exist for 2 ports only");
    }
    if (references_.empty()) {
      references_.assign(static_cast<std::size_t>(num_ports_), option_reference_);
    }
    // A list of another length was complained about already.
    references_.resize(static_cast<std::size_t>(num_ports_), option_reference_);
    if (!modes_.empty() && num_errors_ == 0) check_modes();
    if (!modes_.empty() && (parameter_ == 'h' || parameter_ == 'g')) {
      error(list_line_, "found a mixed-mode order with H- or G-parameters; wanted S, Y or Z");
    }

    // Where each pair of numbers of a point goes: offsets in the column-major matrix.
    const int n = num_ports_;
    for (int row = 0; row < n; ++row) {
      const int begin = matrix_format_ == MatrixFormat::kUpper ? row : 0;
      const int end = matrix_format_ == MatrixFormat::kLower ? row + 1 : n;
      for (int column = begin; column < end; ++column) {
        offsets_.push_back({Index{column} * n + row, matrix_format_ == MatrixFormat::kFull
                                                         ? Index{column} * n + row
                                                         : Index{row} * n + column});
      }
    }
    if (n == 2 && two_port_order_ == 21 && matrix_format_ == MatrixFormat::kFull) {
      std::swap(offsets_[1], offsets_[2]);
    }
    needed_ = 1 + 2 * static_cast<Index>(offsets_.size());
    const Index capacity = num_words_ / needed_ + 1;
    network_.frequencies_hz.resize(capacity);
    network_.values.resize(Index{n} * n, capacity);
    network_.reference_ohm =
        Eigen::Map<const Eigen::VectorXd>(references_.data(), n).cast<Complex>();
  }

  /// Reads the numbers of a line into row_; false after a complaint.
  bool numbers(std::string_view line) {
    row_.clear();
    std::string_view rest = line;
    const char* at = rest.data();
    const char* const end = at + rest.size();
    bool good = true;
    while (at != end) {
      if (is_blank(*at)) {
        ++at;
        continue;
      }
      double value = 0.0;
      const char* const digits = *at == '+' && at + 1 != end && at[1] != '-' ? at + 1 : at;
      const auto [stop, code] = std::from_chars(digits, end, value);
      if (code == std::errc{} && (stop == end || is_blank(*stop)) && std::isfinite(value)) {
        row_.push_back(value);
        at = stop;
        continue;
      }
      // The slow way decides over underflow and gives the complaint.
      const char* word_end = at;
      while (word_end != end && !is_blank(*word_end)) ++word_end;
      const std::string_view word(at, static_cast<std::size_t>(word_end - at));
      const auto number = parse_number(word);
      if (!number && good) {
        good = false;
        error(line_, "found " + shown_text(word) + "; wanted a finite number" +
                         (word.find(',') != std::string_view::npos ? " with a decimal point" : ""));
      }
      row_.push_back(number.value_or(0.0));
      at = word_end;
    }
    return good;
  }

  void data_line(std::string_view line) {
    const bool good = numbers(line);
    const auto count = static_cast<Index>(row_.size());
    const bool odd = count % 2 != 0;
    if (resynchronise_) {
      if (!odd) return;  // the rest of a point that was already complained about
      resynchronise_ = false;
      got_ = 0;
    }
    // A continuation holds whole pairs. An odd count that can't belong to the point under way opens
    // the next one.
    if (got_ > 0 && odd && (got_ % 2 != 0 || got_ + count > needed_)) {
      incomplete();
      if (stop_) return;
    }
    if (got_ == 0) {
      point_line_ = line_;
      point_good_ = true;
      std::string_view rest = line;
      const std::string_view word = next_word(rest);
      const auto frequency = parse_shifted(word, frequency_power_);
      if (good && frequency && version_ == 1 && num_ports_ == 2 && count == 5 && num_points_ > 0 &&
          *frequency <= network_.frequencies_hz[num_points_ - 1]) {
        section_ = Section::kNoise;
        return noise_line(line);
      }
      open_point(word, frequency);
    }
    if (!good) point_good_ = false;
    if (got_ + count > needed_) {
      error(point_line_, "found " + number_list("number", got_ + count) + "; " + needs() +
                             other_port_count(got_ + count));
      got_ = 0;
      resynchronise_ = true;
      return;
    }
    std::copy(row_.begin(), row_.end(), std::back_inserter(point_));
    got_ += count;
    if (got_ == needed_) close_point();
  }

  void open_point(std::string_view word, std::optional<double> frequency) {
    point_.clear();
    point_.reserve(static_cast<std::size_t>(needed_));
    frequency_ = frequency.value_or(0.0);
    if (!frequency) {
      // A word that is no number at all was complained about by numbers().
      if (parse_number(word)) {
        error(line_, "found frequency " + shown_text(word) + "; wanted a finite number of " +
                         std::string(name_of_unit(frequency_power_)));
      }
      point_good_ = false;
    } else if (frequency_ < 0) {
      error(line_, "found frequency " + exact(frequency_) + " Hz; wanted >= 0");
      point_good_ = false;
    } else if (num_points_ > 0 && frequency_ <= network_.frequencies_hz[num_points_ - 1]) {
      error(line_, "frequency " + exact(frequency_) + " Hz does not rise above " +
                       exact(network_.frequencies_hz[num_points_ - 1]) + " Hz before it");
      point_good_ = false;
    }
  }

  [[nodiscard]] std::string needs() const {
    const std::string ports = std::to_string(num_ports_);
    const Index pairs = static_cast<Index>(offsets_.size());
    return "a " + ports + "-port point needs " + std::to_string(needed_) + " (1 frequency + 2 x " +
           std::to_string(pairs) + ")";
  }

  /// A hint when the first point looks like that of another number of ports; ends the reading,
  /// since every other line would be wrong as well.
  std::string other_port_count(Index count) {
    if (num_points_ > 0 || version_ == 2) return "";
    const auto other = ports_of_words(first_point_words_);
    if (!other || *other == num_ports_ || count > first_point_words_ + needed_) return "";
    stop_ = true;
    return "; the layout is that of a " + std::to_string(*other) + "-port";
  }

  void incomplete() {
    error(point_line_,
          "found " + number_list("number", got_) + "; " + needs() + other_port_count(got_));
    got_ = 0;
  }

  void close_point() {
    got_ = 0;
    if (!point_good_) return;
    if (num_points_ == network_.frequencies_hz.size()) {
      const Index larger = num_points_ + num_points_ / 2 + 1;
      network_.frequencies_hz.conservativeResize(larger);
      network_.values.conservativeResize(Eigen::NoChange, larger);
    }
    Complex* const target = network_.values.col(num_points_).data();
    for (std::size_t i = 0; i < offsets_.size(); ++i) {
      const Complex value = complex_of(point_[1 + 2 * i], point_[2 + 2 * i]);
      if (!std::isfinite(value.real()) || !std::isfinite(value.imag())) {
        error(point_line_, "found " + exact(point_[1 + 2 * i]) + " dB; wanted a finite magnitude");
        return;
      }
      target[offsets_[i][0]] = value;
      target[offsets_[i][1]] = value;
    }
    network_.frequencies_hz[num_points_] = frequency_;
    ++num_points_;
  }

  [[nodiscard]] Complex complex_of(double first, double second) const {
    switch (format_) {
      case Format::kRealImaginary:
        return {first, second};
      case Format::kMagnitudeAngle:
        break;
      case Format::kDecibelAngle:
        first = std::pow(10.0, first / 20.0);
        break;
    }
    const double angle = second * (std::numbers::pi / 180.0);
    return {first * std::cos(angle), first * std::sin(angle)};
  }

  void noise_line(std::string_view line) {
    if (!numbers(line)) return;
    const auto count = static_cast<Index>(row_.size());
    if (count != 5) {
      error(line_,
            "found " + number_list("number", count) + "; a line of noise parameters needs 5");
      return;
    }
    if (num_noise_ > 0 && row_[0] <= last_noise_frequency_) {
      error(line_, "noise frequency " + exact(row_[0]) + " does not rise above " +
                       exact(last_noise_frequency_) + " before it");
    }
    last_noise_frequency_ = row_[0];
    ++num_noise_;
  }

  /// The data block is over: by [Noise Data], [End] or the end of the text.
  void end_network() {
    if (!network_begun_) return;
    if (got_ > 0) incomplete();
  }

  void close() {
    if (section_ == Section::kInformation) {
      error(0, "found the end of the file inside [Begin Information]; wanted [End Information]");
    }
    unfinished_list();
    end_network();
    if (stop_) return;
    if (num_errors_ == 0 && num_points_ == 0) {
      return error(0, version_ == 2 && !network_begun_
                          ? "found no [Network Data]; wanted at least one frequency point"
                          : "found no data; wanted at least one frequency point");
    }
    if (num_errors_ > 0) return;
    if (num_frequencies_ && *num_frequencies_ != num_points_) {
      return error(0, "found " + number_list("frequency point", num_points_) +
                          "; [Number of Frequencies] says " + std::to_string(*num_frequencies_));
    }
    if (version_ == 2 && num_noise_frequencies_.value_or(0) != num_noise_) {
      return error(0, "found " + number_list("line", num_noise_) +
                          " of noise parameters; [Number of Noise Frequencies] says " +
                          std::to_string(num_noise_frequencies_.value_or(0)));
    }
    if (version_ == 2 && !has_end_) warning(0, "found no [End]; the file may be cut off");
    if (num_points_ < network_.frequencies_hz.size()) {
      network_.frequencies_hz.conservativeResize(num_points_);
      network_.values.conservativeResize(Eigen::NoChange, num_points_);
    }
    to_scattering();
  }

  // From the file's parameters to single-ended S ------------------------------------------------

  void to_scattering() {
    const int n = num_ports_;
    // References in the order of the matrix's rows, and the orthonormal transform from port waves
    // to the waves of these rows.
    Eigen::VectorXd reference = network_.reference_ohm.real();
    Eigen::MatrixXcd transform;
    if (!modes_.empty()) {
      transform = Eigen::MatrixXcd::Zero(n, n);
      Eigen::VectorXd of_rows(n);
      for (Index row = 0; row < n; ++row) {
        const Mode& mode = modes_[static_cast<std::size_t>(row)];
        const double port_reference = reference[mode.first - 1];
        if (mode.kind == 'S') {
          transform(row, mode.first - 1) = 1.0;
          of_rows[row] = port_reference;
        } else {
          transform(row, mode.first - 1) = std::numbers::sqrt2 / 2;
          transform(row, mode.second - 1) = (mode.kind == 'D' ? -1 : 1) * std::numbers::sqrt2 / 2;
          of_rows[row] = port_reference * (mode.kind == 'D' ? 2.0 : 0.5);
        }
      }
      reference = of_rows;
    }
    // Version 1 stores Y, Z, H and G normalised to R; they are S's of a 1 ohm system then.
    if (version_ == 1) reference.setOnes();
    if (parameter_ == 's' && modes_.empty()) return;
    for (Index k = 0; k < num_points_; ++k) {
      Eigen::Map<Eigen::MatrixXcd> matrix = network_.at(k);
      if (parameter_ != 's') matrix = scattering_of(matrix, reference);
      if (!modes_.empty()) matrix = transform.transpose() * matrix * transform;
      if (!matrix.allFinite()) {
        error(0, "found parameters at " + exact(network_.frequencies_hz[k]) +
                     " Hz that no finite S-parameters belong to");
        return;
      }
    }
  }

  /// With the file's relation written as A v + B i = 0 and v = sqrt(z)(a + b), i = (a - b)/sqrt(z),
  /// S = -(A sqrt(z) - B/sqrt(z))^-1 (A sqrt(z) + B/sqrt(z)).
  [[nodiscard]] Eigen::MatrixXcd scattering_of(const Eigen::MatrixXcd& m,
                                               const Eigen::VectorXd& reference) const {
    const Index n = m.rows();
    Eigen::MatrixXcd a = Eigen::MatrixXcd::Identity(n, n);
    Eigen::MatrixXcd b = Eigen::MatrixXcd::Identity(n, n);
    switch (parameter_) {
      case 'z':
        b = -m;
        break;
      case 'y':
        a = -m;
        break;
      case 'h':  // v1 = h11 i1 + h12 v2, i2 = h21 i1 + h22 v2
        a.col(1) = -m.col(1);
        a(0, 0) = 1.0;
        a(1, 0) = 0.0;
        b.col(0) = -m.col(0);
        b(0, 1) = 0.0;
        b(1, 1) = 1.0;
        break;
      default:  // g: i1 = g11 v1 + g12 i2, v2 = g21 v1 + g22 i2
        a.col(0) = -m.col(0);
        a(0, 1) = 0.0;
        a(1, 1) = 1.0;
        b.col(1) = -m.col(1);
        b(0, 0) = 1.0;
        b(1, 0) = 0.0;
        break;
    }
    const Eigen::VectorXd root = reference.array().sqrt();
    a = a * root.asDiagonal();
    b = b * root.cwiseInverse().asDiagonal();
    return -(a - b).partialPivLu().solve(a + b);
  }

  std::string_view file_;
  std::optional<int> given_ports_;
  std::optional<int> by_name_;
  std::vector<Diagnostic> notes_;
  std::size_t num_errors_ = 0;
  bool stop_ = false;

  Index num_words_ = 0;
  Index first_point_words_ = 0;

  Section section_ = Section::kHeader;
  int line_ = 0;
  int version_ = 1;
  bool complained_of_version_ = false;
  bool complained_of_stray_data_ = false;
  bool has_options_ = false;
  bool has_end_ = false;
  bool network_begun_ = false;
  int options_line_ = 0;
  int frequency_power_ = 9;
  char parameter_ = 's';
  Format format_ = Format::kMagnitudeAngle;
  double option_reference_ = 50.0;

  int num_ports_ = 0;
  int two_port_order_ = 0;
  MatrixFormat matrix_format_ = MatrixFormat::kFull;
  std::optional<long long> num_frequencies_;
  std::optional<long long> num_noise_frequencies_;
  std::vector<double> references_;
  std::vector<Mode> modes_;
  int wanted_references_ = 0;
  int wanted_modes_ = 0;
  int list_line_ = 0;

  Network network_;
  Index num_points_ = 0;
  std::vector<std::array<Index, 2>> offsets_;
  Index needed_ = 0;
  std::vector<double> row_;    ///< numbers of one line
  std::vector<double> point_;  ///< numbers of the point under way
  Index got_ = 0;
  int point_line_ = 0;
  double frequency_ = 0.0;
  bool point_good_ = true;
  bool resynchronise_ = false;
  Index num_noise_ = 0;
  double last_noise_frequency_ = 0.0;
};

// Writing --------------------------------------------------------------------------------------

void append_number(std::string& text, double value) {
  std::array<char, 40> buffer{};
  const auto [end, code] = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value);
  if (value >= 0 && !std::signbit(value)) text += ' ';
  text.append(buffer.data(), end);
}

/// The shortest decimal that stands for `value`, with its point moved by -power places: exact in
/// any unit, since only the exponent changes.
std::string shifted_text(double value, int power) {
  if (power == 0 || value == 0.0) return exact(value);
  std::array<char, 40> buffer{};
  const auto [end, code] = std::to_chars(buffer.data(), buffer.data() + buffer.size(), value,
                                         std::chars_format::scientific);
  const std::string_view text(buffer.data(), static_cast<std::size_t>(end - buffer.data()));
  const std::size_t mark = text.find('e');
  const int exponent = static_cast<int>(*parse_integer(text.substr(mark + 1))) - power;
  std::string digits(text.substr(0, mark));
  if (exponent == 0) return digits;
  // Plain notation where it is short.
  if (exponent < 0 && exponent >= -6) {
    std::erase(digits, '.');
    return "0." + std::string(static_cast<std::size_t>(-exponent - 1), '0') + digits;
  }
  if (exponent > 0 && exponent <= 15) {
    std::erase(digits, '.');
    const auto whole = static_cast<std::size_t>(exponent) + 1;
    if (digits.size() <= whole) return digits + std::string(whole - digits.size(), '0');
    return digits.substr(0, whole) + "." + digits.substr(whole);
  }
  return digits + "e" + std::to_string(exponent);
}

}  // namespace

std::optional<int> ports_from_file_name(std::string_view file_name) {
  const std::size_t dot = file_name.rfind('.');
  if (dot == std::string_view::npos) return std::nullopt;
  const std::string extension = lowercase(file_name.substr(dot + 1));
  if (extension.size() < 3 || extension.size() > 8 || extension.front() != 's' ||
      extension.back() != 'p') {
    return std::nullopt;
  }
  const std::string_view digits = std::string_view(extension).substr(1, extension.size() - 2);
  if (digits.find_first_not_of("0123456789") != std::string_view::npos) return std::nullopt;
  const auto value = parse_integer(digits);
  if (!value || *value < 1) return std::nullopt;
  return static_cast<int>(*value);
}

Result<Network> parse_touchstone(std::string_view text, std::string_view file_name,
                                 std::optional<int> num_ports) {
  Reader reader(file_name, num_ports);
  reader.begin(text, 1.0);
  return reader.finish();
}

Result<TouchstoneFile> read_touchstone(const std::string& path, std::optional<int> num_ports) {
  InputStream stream(path, kLargestInputFile);
  Reader reader(path, num_ports);
  Sha256 digest;
  // Pieces end with a line; a line longer than a piece makes the buffer grow.
  std::string buffer(std::size_t{1} << 22, '\0');
  std::size_t filled = 0;
  bool begun = false;
  for (bool at_end = false; !at_end && !reader.failed();) {
    if (filled == buffer.size()) buffer.resize(2 * buffer.size());
    const std::size_t got = stream.read(buffer.data() + filled, buffer.size() - filled);
    digest.update({buffer.data() + filled, got});
    filled += got;
    at_end = got == 0;
    if (!at_end && filled < buffer.size()) continue;
    const std::string_view held(buffer.data(), filled);
    const std::size_t feed = held.rfind('\n');
    if (!at_end && feed == std::string_view::npos) continue;
    const std::string_view piece = at_end ? held : held.substr(0, feed + 1);
    if (begun) {
      reader.add(piece);
    } else {
      const double whole = static_cast<double>(stream.size().value_or(filled));
      reader.begin(piece, at_end || whole <= 0.0 ? 1.0 : static_cast<double>(piece.size()) / whole);
      begun = true;
    }
    filled -= piece.size();
    buffer.erase(0, piece.size());
    buffer.resize(std::max(buffer.size() + piece.size(), std::size_t{1} << 22));
  }
  if (stream.failure()) return failure<TouchstoneFile>(*stream.failure());
  Result<Network> network = reader.finish();
  if (!network) return {std::nullopt, std::move(network.notes)};
  return {TouchstoneFile{std::move(*network.value), digest.hex()}, std::move(network.notes)};
}

std::string write_touchstone(const Network& network, const TouchstoneOptions& options) {
  const int n = network.num_ports();
  if (network.reference_ohm.imag().cwiseAbs().maxCoeff() != 0.0) {
    throw std::invalid_argument("write_touchstone: a reference is complex, but must be real");
  }
  const Eigen::VectorXd reference = network.reference_ohm.real();
  const bool equal = (reference.array() == reference[0]).all();
  const int version = options.version.value_or(equal ? 1 : 2);
  if (version != 1 && version != 2) {
    throw std::invalid_argument("write_touchstone: version must be 1 or 2");
  }
  if (version == 1 && !equal) {
    throw std::invalid_argument("write_touchstone: version 1 needs equal references");
  }
  using Format = TouchstoneOptions::Format;
  using Unit = TouchstoneOptions::Unit;
  const int power = options.unit == Unit::kHz    ? 0
                    : options.unit == Unit::kKhz ? 3
                    : options.unit == Unit::kMhz ? 6
                                                 : 9;
  std::string text;
  for (const std::string& comment : options.comments) {
    // A line break inside a comment would end it.
    std::string_view rest = comment;
    for (;;) {
      const std::size_t end = rest.find_first_of("\r\n");
      text += "! ";
      text += rest.substr(0, end);
      text += '\n';
      if (end == std::string_view::npos) break;
      rest.remove_prefix(end + 1);
    }
  }
  if (version == 2) text += "[Version] 2.0\n";
  text += "# ";
  text += name_of_unit(power);
  text += " S ";
  text += options.format == Format::kRealImaginary    ? "RI"
          : options.format == Format::kMagnitudeAngle ? "MA"
                                                      : "DB";
  text += " R " + exact(reference[0]) + "\n";
  if (version == 2) {
    text += "[Number of Ports] " + std::to_string(n) + "\n";
    if (n == 2) text += "[Two-Port Data Order] 21_12\n";
    text += "[Number of Frequencies] " + std::to_string(network.num_points()) + "\n[Reference]";
    for (const double ohm : reference) text += " " + exact(ohm);
    text += "\n[Network Data]\n";
  }
  for (Index k = 0; k < network.num_points(); ++k) {
    text += shifted_text(network.frequencies_hz[k], power);
    const auto matrix = network.at(k);
    for (int i = 0; i < n * n; ++i) {
      if (n > 2 && i > 0 && i % n == 0) {
        text += '\n';
      } else if (n > 2 && i > 0 && (i % n) % 4 == 0) {
        text += '\n';
      }
      // Two ports go down the columns, more along the rows.
      const Complex value = n == 2 ? matrix(i % 2, i / 2) : matrix(i / n, i % n);
      double first = value.real();
      double second = value.imag();
      if (options.format != Format::kRealImaginary) {
        first = std::abs(value);
        second = std::arg(value) * (180.0 / std::numbers::pi);
        if (options.format == Format::kDecibelAngle) {
          // Zero has no decibels; the least normal number stands in.
          first = 20.0 * std::log10(std::max(first, std::numeric_limits<double>::min()));
        }
      }
      text += ' ';
      append_number(text, first);
      text += ' ';
      append_number(text, second);
    }
    text += '\n';
  }
  if (version == 2) text += "[End]\n";
  return text;
}

}  // namespace tapwright

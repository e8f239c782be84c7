#pragma once
// Numbers to text and back without a locale, and small text helpers.

#include <optional>
#include <string>
#include <string_view>
#include <vector>

namespace tapwright {

/// The whole of `text` as a finite number; a leading '+' is accepted. Empty when it is anything
/// else.
[[nodiscard]] std::optional<double> parse_number(std::string_view text);
/// The whole of `text` as a decimal integer; a leading '+' is accepted.
[[nodiscard]] std::optional<long long> parse_integer(std::string_view text);

/// Shortest text that reads back as the same double.
[[nodiscard]] std::string exact(double value);
/// Fixed number of decimals, for people; never prints "-0.0".
[[nodiscard]] std::string fixed(double value, int decimals);
/// At most `digits` significant digits, for people.
[[nodiscard]] std::string significant(double value, int digits);

/// 0x and upper-case digits, as register maps are written.
[[nodiscard]] std::string hexadecimal(unsigned long long value);

/// `text` shortened and made printable: control characters and broken UTF-8 escaped, at most about
/// `max_bytes` bytes.
[[nodiscard]] std::string printable_text(std::string_view text, std::size_t max_bytes);
/// The same in double quotes, for use inside a message.
[[nodiscard]] std::string shown_text(std::string_view text, std::size_t max_bytes = 60);
/// Bytes of the well-formed UTF-8 sequence that `text` begins with; 0 when there is none.
[[nodiscard]] std::size_t utf8_length(std::string_view text);

/// The candidate nearest to `word` by edit distance, when near enough to be a likely slip.
[[nodiscard]] std::optional<std::string> nearest_word(std::string_view word,
                                                      const std::vector<std::string>& candidates);

[[nodiscard]] std::string_view trimmed(std::string_view text);
[[nodiscard]] std::string lowercase(std::string_view text);

}  // namespace tapwright

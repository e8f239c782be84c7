#include "report/escape.hpp"

namespace tapwright {
namespace {

/// Length of the well-formed UTF-8 sequence at `at`, or 0.
std::size_t utf8_length(std::string_view text, std::size_t at) {
  const auto byte = [&](std::size_t i) { return static_cast<unsigned char>(text[i]); };
  const unsigned lead = byte(at);
  const std::size_t size = lead < 0x80 ? 1 : lead >= 0xC2 && lead < 0xE0 ? 2 : lead >= 0xE0 && lead < 0xF0 ? 3
                           : lead >= 0xF0 && lead < 0xF5 ? 4 : 0;
  if (size == 0 || at + size > text.size()) return 0;
  for (std::size_t i = 1; i < size; ++i) {
    if ((byte(at + i) & 0xC0) != 0x80) return 0;
  }
  if (lead == 0xE0 && byte(at + 1) < 0xA0) return 0;
  if (lead == 0xED && byte(at + 1) > 0x9F) return 0;  // surrogates
  if (lead == 0xF0 && byte(at + 1) < 0x90) return 0;
  if (lead == 0xF4 && byte(at + 1) > 0x8F) return 0;
  return size;
}

}  // namespace

std::string markup_escaped(std::string_view text) {
  std::string out;
  for (std::size_t i = 0; i < text.size();) {
    const std::size_t length = utf8_length(text, i);
    const char c = text[i];
    const auto u = static_cast<unsigned char>(c);
    if (length == 0 || (u < 0x20 && c != '\t' && c != '\n') || u == 0x7F) {
      out += "\xEF\xBF\xBD";
    } else if (c == '&') {
      out += "&amp;";
    } else if (c == '<') {
      out += "&lt;";
    } else if (c == '>') {
      out += "&gt;";
    } else if (c == '"') {
      out += "&quot;";
    } else if (c == '\'') {
      out += "&#39;";
    } else {
      out += text.substr(i, length);
    }
    i += length == 0 ? 1 : length;
  }
  return out;
}

std::string script_escaped(std::string_view json) {
  std::string out;
  for (std::size_t i = 0; i < json.size(); ++i) {
    if (json[i] == '<') out += "\\u003c";
    else if (json[i] == '>') out += "\\u003e";
    else if (json[i] == '&') out += "\\u0026";
    else if (json.substr(i, 3) == "\xE2\x80\xA8") { out += "\\u2028"; i += 2; }
    else if (json.substr(i, 3) == "\xE2\x80\xA9") { out += "\\u2029"; i += 2; }
    else out += json[i];
  }
  return out;
}

}  // namespace tapwright

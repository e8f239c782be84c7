#include "report/escape.hpp"

#include "tapwright/base/text.hpp"

namespace tapwright {

std::string markup_escaped(std::string_view text) {
  std::string out;
  for (std::size_t i = 0; i < text.size();) {
    const std::size_t length = utf8_length(text.substr(i));
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

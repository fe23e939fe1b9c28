#pragma once

// Text from a file as it may stand in a one-line message.

#include <string>
#include <string_view>

namespace softsill {

/// At most 40 characters, control characters replaced by '?'.
inline std::string shown_text(std::string_view text) {
  constexpr std::size_t longest = 40;
  std::string shown;
  for (const char c : text.substr(0, longest)) {
    shown += static_cast<unsigned char>(c) < 0x20 || c == 0x7f ? '?' : c;
  }
  return text.size() > longest ? shown + "..." : shown;
}

}  // namespace softsill

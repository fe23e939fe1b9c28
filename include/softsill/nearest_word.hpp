#pragma once

/// \file nearest_word.hpp
/// "Did you mean": the known word closest to one that was mistyped.

#include <algorithm>
#include <cctype>
#include <cstddef>
#include <string>
#include <string_view>
#include <vector>

namespace softsill {

/// Number of insertions, deletions, substitutions and swaps of neighbouring letters that turn one
/// word into the other (restricted Damerau-Levenshtein distance: Damerau 1964, Levenshtein 1966).
/// Upper and lower case count as the same letter.
inline std::size_t edit_distance(std::string_view a, std::string_view b) {
  const auto same = [](char x, char y) {
    return std::tolower(static_cast<unsigned char>(x)) ==
           std::tolower(static_cast<unsigned char>(y));
  };
  std::vector<std::size_t> before_last, last(b.size() + 1), row(b.size() + 1);
  for (std::size_t j = 0; j <= b.size(); ++j) {
    last[j] = j;
  }
  for (std::size_t i = 1; i <= a.size(); ++i) {
    row[0] = i;
    for (std::size_t j = 1; j <= b.size(); ++j) {
      const std::size_t change = same(a[i - 1], b[j - 1]) ? 0 : 1;
      row[j] = std::min({last[j] + 1, row[j - 1] + 1, last[j - 1] + change});
      if (i > 1 && j > 1 && same(a[i - 1], b[j - 2]) && same(a[i - 2], b[j - 1])) {
        row[j] = std::min(row[j], before_last[j - 2] + 1);
      }
    }
    before_last = last;
    last = row;
  }
  return last[b.size()];
}

/// The candidate with the smallest edit distance; the first of several. Empty only when there are
/// no candidates. `candidates` is any range of things a std::string_view can be made from.
template <typename Words>
std::string nearest_word(std::string_view word, const Words& candidates) {
  std::string best;
  std::size_t least = static_cast<std::size_t>(-1);
  for (const auto& candidate : candidates) {
    const std::string_view text(candidate);
    const std::size_t distance = edit_distance(word, text);
    if (distance < least) {
      least = distance;
      best = std::string(text);
    }
  }
  return best;
}

}  // namespace softsill

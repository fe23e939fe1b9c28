#include "softsill/nearest_word.hpp"

#include <gtest/gtest.h>

#include <array>

namespace softsill {
namespace {

// kitten / sitting: the textbook pair, by hand: k->s, e->i, +g.
TEST(EditDistance, of_known_pairs) {
  EXPECT_EQ(edit_distance("kitten", "sitting"), 3u);
  EXPECT_EQ(edit_distance("", "abc"), 3u);
  EXPECT_EQ(edit_distance("abc", ""), 3u);
  EXPECT_EQ(edit_distance("same", "same"), 0u);
  EXPECT_EQ(edit_distance("Same", "sAME"), 0u);
  EXPECT_EQ(edit_distance("spline", "splien"), 1u);  // one swap
  EXPECT_EQ(edit_distance("ca", "abc"), 3u);         // restricted: no edits inside a swap
}

TEST(EditDistance, is_symmetric_and_obeys_bounds) {
  const std::array<std::string, 6> words = {"", "a", "start_ms", "end_ms", "repeats", "recording"};
  for (const std::string& a : words) {
    for (const std::string& b : words) {
      EXPECT_EQ(edit_distance(a, b), edit_distance(b, a));
      EXPECT_LE(edit_distance(a, b), std::max(a.size(), b.size()));
      EXPECT_GE(edit_distance(a, b), std::max(a.size(), b.size()) - std::min(a.size(), b.size()));
    }
  }
}

TEST(NearestWord, finds_the_closest_and_prefers_the_first) {
  const std::vector<std::string> words = {"spline", "steps", "absent"};
  EXPECT_EQ(nearest_word("splines", words), "spline");
  EXPECT_EQ(nearest_word("step", words), "steps");
  EXPECT_EQ(nearest_word("b", std::vector<std::string>{"a", "c"}), "a");
  EXPECT_EQ(nearest_word("x", std::vector<std::string>{}), "");
}

}  // namespace
}  // namespace softsill

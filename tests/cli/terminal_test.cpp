#include "estimator/cli/terminal.hpp"

#include <gtest/gtest.h>

#include <csignal>
#include <string>

namespace softsill::cli {
namespace {

TEST(Terminal, WidthCountsLettersNotBytes) {
  EXPECT_EQ(width_of("120±8"), 5u);
  EXPECT_EQ(width_of(""), 0u);
}

TEST(Terminal, WrapKeepsWithinTheWidthAndLosesNoWord) {
  const std::string text = "one two three four five six seven";
  const std::string wrapped = wrap(text, 2, 0, 11);
  EXPECT_EQ(wrapped, "one two\n  three\n  four five\n  six seven");
  EXPECT_EQ(wrap("a word", 0, 0, 100), "a word");
  EXPECT_EQ(wrap("unbreakable", 0, 0, 4), "unbreakable");
  EXPECT_EQ(wrap("", 4), "");
}

TEST(Terminal, TableAlignsColumnsAndWrapsTheLast) {
  Table table({"name", "value", "about"}, {Table::Align::left, Table::Align::right});
  table.add({"a", "1.5", "short"});
  table.add({"longer±", "-12.25", "x"});
  EXPECT_EQ(table.str(2),
            "  name      value  about\n"
            "  a           1.5  short\n"
            "  longer±  -12.25  x\n");
  Table wide;
  wide.add({"key", std::string(60, 'w') + " " + std::string(60, 'v')});
  EXPECT_EQ(wide.str(0), "key  " + std::string(60, 'w') + "\n     " + std::string(60, 'v') + "\n");
}

TEST(Terminal, SignificantDigits) {
  EXPECT_EQ(significant(0.0), "0");
  EXPECT_EQ(significant(1.2345), "1.23");
  EXPECT_EQ(significant(-123.45), "-123");
  EXPECT_EQ(significant(0.00012345), "0.000123");
  EXPECT_EQ(significant(1.5e9), "1.5e+09");
}

TEST(Terminal, QuantitiesShowTheDigitsThatTheirIntervalAllows) {
  Quantity quantity;
  EXPECT_EQ(quantity_text(quantity).value, "");
  quantity.value = 1.23456;
  quantity.low = 1.10111;
  quantity.high = 1.39999;
  const QuantityText text = quantity_text(quantity);
  EXPECT_EQ(text.value, "1.23");
  EXPECT_EQ(text.low, "1.10");
  EXPECT_EQ(text.high, "1.40");
  quantity.value = -0.0001;
  quantity.low = -1.0;
  quantity.high = 1.0;
  EXPECT_EQ(quantity_text(quantity).value, "0.0");
  quantity.low.reset();
  EXPECT_EQ(quantity_text(quantity).low, "");
}

TEST(Terminal, ControlCRaisesTheFlag) {
  catch_interrupts();
  EXPECT_FALSE(interrupted());
  std::raise(SIGINT);
  EXPECT_TRUE(interrupted());
}

}  // namespace
}  // namespace softsill::cli

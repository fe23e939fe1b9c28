#include "softsill/files.hpp"

#include <gmock/gmock.h>

#include "tests/recording/scratch.hpp"

namespace softsill {
namespace {

using test::error_of;
using ::testing::HasSubstr;
using ::testing::StartsWith;

class Files : public test::Scratch {
 protected:
  std::size_t entries() const {
    std::size_t count = 0;
    for ([[maybe_unused]] const auto& entry :
         std::filesystem::directory_iterator(std::filesystem::path(path("x")).parent_path())) {
      ++count;
    }
    return count;
  }
};

// Known answers: FIPS 180-2 (2002), appendix B.1 to B.3, repeated in the examples for FIPS 180-4.
TEST_F(Files, hashes_the_published_messages) {
  EXPECT_EQ(sha256_of_file(write("abc", "abc")),
            "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
  EXPECT_EQ(
      sha256_of_file(write("two", "abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq")),
      "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1");
  EXPECT_EQ(sha256_of_file(write("million", std::string(1000000, 'a'))),
            "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0");
}

// The empty message (from memory, and what every implementation prints).
TEST_F(Files, hashes_an_empty_file) {
  EXPECT_EQ(sha256_of_file(write("empty", "")),
            "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855");
}

TEST_F(Files, writes_what_is_read_back) {
  const std::string text = "first\nsecond \xc2\xb1\n";
  write_file_atomically(path("out.txt"), text);
  EXPECT_EQ(read_text_file(path("out.txt")), text);
  write_file_atomically(path("out.txt"), "replaced");
  EXPECT_EQ(read_text_file(path("out.txt")), "replaced");
  EXPECT_EQ(entries(), 1u);
}

TEST_F(Files, leaves_nothing_behind_when_writing_fails) {
  std::filesystem::create_directory(path("taken"));
  write("taken/inside", "x");
  // A folder that is not empty cannot be renamed over: the last step fails.
  EXPECT_THAT(error_of([&] { write_file_atomically(path("taken"), "text"); }),
              StartsWith(path("taken") + ": cannot be written"));
  EXPECT_EQ(entries(), 1u);
  EXPECT_THAT(error_of([&] { write_file_atomically(path("none/out"), "text"); }),
              HasSubstr("check that the folder exists"));
}

TEST_F(Files, says_what_cannot_be_read) {
  EXPECT_THAT(error_of([&] { read_text_file(path("none")); }), HasSubstr("there is no such file"));
  EXPECT_THAT(error_of([&] { sha256_of_file(path("none")); }), HasSubstr("there is no such file"));
  std::filesystem::create_directory(path("folder"));
  EXPECT_THAT(error_of([&] { read_text_file(path("folder")); }), HasSubstr("is a folder"));
  EXPECT_THAT(error_of([&] { read_text_file(write("long", std::string(101, 'x')), 100); }),
              HasSubstr("too large"));
  EXPECT_EQ(read_text_file(write("fits", std::string(100, 'x')), 100).size(), 100u);
  EXPECT_THAT(error_of([&] { read_text_file(write("nul", std::string("a\0b", 3))); }),
              HasSubstr("byte 1: holds NUL bytes"));
  EXPECT_THAT(error_of([] { read_text_file("/dev/zero"); }), HasSubstr("not a regular file"));
}

}  // namespace
}  // namespace softsill

#include "softsill/files.hpp"

#include <fcntl.h>
#include <unistd.h>

#include <array>
#include <atomic>
#include <cerrno>
#include <cstring>
#include <filesystem>
#include <vector>

#include "estimator/recording/file_handle.hpp"
#include "estimator/recording/sha256.hpp"
#include "softsill/error.hpp"

namespace softsill {

std::string read_text_file(const std::string& path, std::size_t limit_bytes) {
  const FileHandle file = FileHandle::open_for_reading(path);
  std::string text;
  std::array<char, 1 << 16> piece;
  if (file.size() > limit_bytes) {
    throw Error(
        path, "",
        "is " + std::to_string(file.size()) + " bytes long, too large to be this kind of text file",
        "check that the right file is named");
  }
  text.reserve(file.size());
  for (;;) {
    const std::size_t got = file.read(piece.data(), piece.size());
    if (got == 0) {
      break;
    }
    text.append(piece.data(), got);
    if (text.size() > limit_bytes) {
      throw Error(path, "", "is longer than " + std::to_string(limit_bytes) + " bytes",
                  "check that the right file is named");
    }
  }
  const std::size_t nul = text.find('\0');
  if (nul != std::string::npos) {
    throw Error(path, "byte " + std::to_string(nul), "holds NUL bytes, so it is not a text file",
                "check that the right file is named and was written completely");
  }
  return text;
}

void write_file_atomically(const std::string& path, std::string_view text) {
  // O_EXCL and a name of our own: two runs cannot write into one another's file.
  static std::atomic<unsigned> serial{0};
  const std::string beside =
      path + ".part-" + std::to_string(::getpid()) + "-" + std::to_string(serial.fetch_add(1));
  const int descriptor = ::open(beside.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0666);
  if (descriptor < 0) {
    throw Error(path, "", std::string("cannot be written: ") + std::strerror(errno),
                "check that the folder exists and may be written to");
  }
  const auto give_up = [&](int reason) {
    ::close(descriptor);
    ::unlink(beside.c_str());
    throw Error(path, "", std::string("cannot be written: ") + std::strerror(reason),
                "check permissions and the space left on the disk");
  };
  const char* next = text.data();
  std::size_t left = text.size();
  while (left > 0) {
    const ssize_t put = ::write(descriptor, next, left);
    if (put < 0) {
      if (errno == EINTR) {
        continue;
      }
      give_up(errno);
    }
    next += put;
    left -= static_cast<std::size_t>(put);
  }
  if (::fsync(descriptor) != 0) {
    give_up(errno);
  }
  if (::rename(beside.c_str(), path.c_str()) != 0) {
    give_up(errno);
  }
  ::close(descriptor);
  // The new name itself reaches the disk only with its folder; not every file system can do that,
  // and the content is safe either way, so a refusal is no error.
  const std::string folder = std::filesystem::path(path).parent_path().string();
  const int folder_descriptor =
      ::open(folder.empty() ? "." : folder.c_str(), O_RDONLY | O_DIRECTORY | O_CLOEXEC);
  if (folder_descriptor >= 0) {
    (void)::fsync(folder_descriptor);
    ::close(folder_descriptor);
  }
}

std::string sha256_of_file(const std::string& path) {
  const FileHandle file = FileHandle::open_for_reading(path);
  Sha256 hash;
  std::vector<char> piece(std::size_t{1} << 20);
  for (;;) {
    const std::size_t got = file.read(piece.data(), piece.size());
    if (got == 0) {
      return hash.finish();
    }
    hash.add(piece.data(), got);
  }
}

}  // namespace softsill

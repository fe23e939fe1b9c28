#include "softsill/files.hpp"

#include <fcntl.h>
#include <openssl/evp.h>
#include <sys/stat.h>
#include <unistd.h>

#include <array>
#include <cerrno>
#include <cstdio>
#include <cstring>
#include <filesystem>
#include <memory>
#include <vector>

#include "estimator/recording/file_handle.hpp"
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
  // The name is free by construction (mkstemp), so that two runs cannot write into one another.
  std::string beside = path + ".XXXXXX";
  const int descriptor = ::mkstemp(beside.data());
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
  // mkstemp makes a private file; the result gets the permissions any new file would have.
  const mode_t mask = ::umask(0);
  ::umask(mask);
  if (::fchmod(descriptor, 0666 & ~mask) != 0 || ::fsync(descriptor) != 0) {
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
  const std::unique_ptr<EVP_MD_CTX, decltype(&EVP_MD_CTX_free)> context(EVP_MD_CTX_new(),
                                                                        &EVP_MD_CTX_free);
  if (!context || EVP_DigestInit_ex(context.get(), EVP_sha256(), nullptr) != 1) {
    throw InternalError("SHA-256 is not available from the crypto library");
  }
  std::vector<char> piece(std::size_t{1} << 20);
  for (;;) {
    const std::size_t got = file.read(piece.data(), piece.size());
    if (got == 0) {
      break;
    }
    if (EVP_DigestUpdate(context.get(), piece.data(), got) != 1) {
      throw InternalError("the crypto library refused to hash");
    }
  }
  std::array<unsigned char, EVP_MAX_MD_SIZE> digest;
  unsigned int length = 0;
  if (EVP_DigestFinal_ex(context.get(), digest.data(), &length) != 1) {
    throw InternalError("the crypto library refused to finish a hash");
  }
  constexpr char digits[] = "0123456789abcdef";
  std::string text;
  for (unsigned int i = 0; i < length; ++i) {
    text += digits[digest[i] >> 4];
    text += digits[digest[i] & 15];
  }
  return text;
}

}  // namespace softsill

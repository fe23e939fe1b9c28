#include "estimator/recording/file_handle.hpp"

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include <cerrno>
#include <cstring>
#include <utility>

#include "softsill/error.hpp"

namespace softsill {

FileHandle FileHandle::open_for_reading(const std::string& path) {
  // O_NONBLOCK: opening a named pipe must be refused below, not waited for.
  const int descriptor = ::open(path.c_str(), O_RDONLY | O_CLOEXEC | O_NONBLOCK);
  if (descriptor < 0) {
    if (errno == ENOENT) {
      throw Error(path, "", "there is no such file",
                  "check the name; paths in a sheet are relative to the sheet");
    }
    throw Error(path, "", std::string("cannot be opened: ") + std::strerror(errno));
  }
  struct stat facts {};
  if (::fstat(descriptor, &facts) != 0 || !S_ISREG(facts.st_mode)) {
    ::close(descriptor);
    throw Error(path, "", S_ISDIR(facts.st_mode) ? "is a folder" : "is not a regular file",
                "name a file");
  }
  return FileHandle(path, descriptor, static_cast<std::uint64_t>(facts.st_size));
}

FileHandle::FileHandle(FileHandle&& other) noexcept
    : path_(std::move(other.path_)),
      descriptor_(std::exchange(other.descriptor_, -1)),
      size_(other.size_) {}

FileHandle::~FileHandle() {
  if (descriptor_ >= 0) {
    ::close(descriptor_);
  }
}

std::size_t FileHandle::read(char* into, std::size_t room) const {
  for (;;) {
    const ssize_t got = ::read(descriptor_, into, room);
    if (got >= 0) {
      return static_cast<std::size_t>(got);
    }
    if (errno != EINTR) {
      throw Error(path_, "", std::string("cannot be read: ") + std::strerror(errno));
    }
  }
}

}  // namespace softsill

#pragma once

// A file opened for reading that closes itself and reports failures as softsill::Error.

#include <cstddef>
#include <cstdint>
#include <string>

namespace softsill {

class FileHandle {
 public:
  /// \throws Error: missing, not a regular file, not readable
  static FileHandle open_for_reading(const std::string& path);

  FileHandle(FileHandle&& other) noexcept;
  FileHandle& operator=(FileHandle&&) = delete;
  ~FileHandle();

  /// Next bytes, at most `room`; 0 at the end. \throws Error on a read failure
  std::size_t read(char* into, std::size_t room) const;
  /// Size on opening, bytes.
  std::uint64_t size() const { return size_; }
  int descriptor() const { return descriptor_; }

 private:
  FileHandle(std::string path, int descriptor, std::uint64_t size)
      : path_(std::move(path)), descriptor_(descriptor), size_(size) {}

  std::string path_;
  int descriptor_;
  std::uint64_t size_;
};

}  // namespace softsill

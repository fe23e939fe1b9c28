#pragma once

// The bytes of an input file in order, unpacked when the file is gzip'd, fingerprinted on the way
// so that large files are read once.

#include <cstddef>
#include <memory>
#include <string>
#include <vector>

#include "estimator/recording/file_handle.hpp"
#include "estimator/recording/sha256.hpp"
#include "softsill/recording.hpp"

namespace softsill {

class ByteSource {
 public:
  /// \throws Error when the file cannot be opened or is empty
  explicit ByteSource(std::string path);
  ~ByteSource();
  ByteSource(const ByteSource&) = delete;
  ByteSource& operator=(const ByteSource&) = delete;

  /// Next bytes of the content, at most `room`; 0 at the end.
  /// \throws Error on read failures and on damaged or truncated gzip data
  std::size_t read(char* into, std::size_t room);
  /// Like read, but fills `room` unless the content ends before.
  std::size_t read_fully(char* into, std::size_t room);
  /// The first bytes (up to 16) without taking them.
  const std::string& first_bytes() const { return first_; }

  bool packed() const { return unpacker_ != nullptr; }
  const std::string& path() const { return path_; }
  /// Bytes in the file, packed or not.
  std::uint64_t file_size() const { return file_.size(); }

  /// SHA-256 of the file as stored: reads what has not been read yet.
  std::string finish_fingerprint();

 private:
  struct Unpacker;

  std::size_t read_stored(char* into, std::size_t room);
  std::size_t unpack(char* into, std::size_t room);

  std::string path_;
  FileHandle file_;
  Sha256 hash_;
  std::string stored_ahead_;  // stored bytes read to recognise the format
  std::string first_;         // content bytes read to recognise the format
  std::size_t first_taken_ = 0;
  std::unique_ptr<Unpacker> unpacker_;
};

}  // namespace softsill

#include "estimator/recording/byte_source.hpp"

#include <zlib.h>

#include <algorithm>
#include <cstring>
#include <utility>

#include "softsill/error.hpp"

namespace softsill {

namespace {
constexpr std::size_t piece_size = std::size_t{1} << 18;
}

struct ByteSource::Unpacker {
  z_stream stream{};
  std::vector<char> stored = std::vector<char>(piece_size);
  bool between_members = false;

  Unpacker() {
    // 15 window bits, +16: gzip wrapper only.
    if (inflateInit2(&stream, 15 + 16) != Z_OK) {
      throw InternalError("zlib could not be started");
    }
  }
  ~Unpacker() { inflateEnd(&stream); }
};

ByteSource::ByteSource(std::string path)
    : path_(std::move(path)), file_(FileHandle::open_for_reading(path_)) {
  char start[16];
  const std::size_t got = read_stored(start, sizeof start);
  if (got == 0) {
    throw Error(path_, "", "is empty", "check that it was written completely");
  }
  stored_ahead_.assign(start, got);
  if (got >= 2 && start[0] == '\x1f' && start[1] == '\x8b') {
    unpacker_ = std::make_unique<Unpacker>();
  }
  const std::size_t content = read_fully(start, sizeof start);
  first_.assign(start, content);
  if (content == 0) {
    throw Error(path_, "", "unpacks to nothing", "check that it was written completely");
  }
}

ByteSource::~ByteSource() = default;

std::size_t ByteSource::read_stored(char* into, std::size_t room) {
  if (!stored_ahead_.empty()) {
    const std::size_t given = std::min(room, stored_ahead_.size());
    std::memcpy(into, stored_ahead_.data(), given);
    stored_ahead_.erase(0, given);
    return given;
  }
  const std::size_t got = file_.read(into, room);
  hash_.add(into, got);
  return got;
}

std::size_t ByteSource::unpack(char* into, std::size_t room) {
  z_stream& stream = unpacker_->stream;
  stream.next_out = reinterpret_cast<Bytef*>(into);
  stream.avail_out = static_cast<uInt>(std::min<std::size_t>(room, piece_size));
  const uInt asked = stream.avail_out;
  while (stream.avail_out == asked) {
    if (stream.avail_in == 0) {
      const std::size_t got = read_stored(unpacker_->stored.data(), unpacker_->stored.size());
      if (got == 0) {
        if (unpacker_->between_members) {
          return 0;
        }
        throw Error(path_, "", "ends in the middle of its gzip data",
                    "it was not written or copied completely");
      }
      stream.next_in = reinterpret_cast<Bytef*>(unpacker_->stored.data());
      stream.avail_in = static_cast<uInt>(got);
    }
    if (std::exchange(unpacker_->between_members, false)) {
      inflateReset(&stream);
    }
    const int state = inflate(&stream, Z_NO_FLUSH);
    if (state == Z_STREAM_END) {
      // A gzip file may hold several members one after the other.
      unpacker_->between_members = true;
    } else if (state != Z_OK && state != Z_BUF_ERROR) {
      throw Error(path_, "", "holds damaged gzip data", "copy or pack it again");
    }
  }
  return asked - stream.avail_out;
}

std::size_t ByteSource::read(char* into, std::size_t room) {
  if (first_taken_ < first_.size()) {
    const std::size_t given = std::min(room, first_.size() - first_taken_);
    std::memcpy(into, first_.data() + first_taken_, given);
    first_taken_ += given;
    return given;
  }
  return packed() ? unpack(into, room) : read_stored(into, room);
}

std::size_t ByteSource::read_fully(char* into, std::size_t room) {
  std::size_t filled = 0;
  while (filled < room) {
    const std::size_t got = read(into + filled, room - filled);
    if (got == 0) {
      break;
    }
    filled += got;
  }
  return filled;
}

std::string ByteSource::finish_fingerprint() {
  std::vector<char> piece(piece_size);
  while (read_stored(piece.data(), piece.size()) > 0) {
  }
  return hash_.finish();
}

}  // namespace softsill

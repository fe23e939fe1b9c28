#pragma once

/// \file files.hpp
/// Whole files: read, written so that they are never half there, and fingerprinted.

#include <cstddef>
#include <string>
#include <string_view>

namespace softsill {

/// The bytes of a text file.
/// \param limit_bytes larger files are refused before anything is read
/// \throws Error naming the file: missing, a directory, unreadable, larger than the limit, or
///         holding NUL bytes (not text)
std::string read_text_file(const std::string& path, std::size_t limit_bytes = std::size_t{1} << 26);

/// Puts `text` into `path` in one step: written to a new file beside it, flushed to the disk
/// (fsync) and renamed over it. Whatever goes wrong, `path` holds its old content or the new, never
/// a part. Nothing is left behind on failure. \throws Error naming the file and the system's reason
void write_file_atomically(const std::string& path, std::string_view text);

/// SHA-256 (FIPS 180-4) of the file's bytes in lower-case hexadecimal, read in pieces.
/// \throws Error naming the file when it cannot be read
std::string sha256_of_file(const std::string& path);

}  // namespace softsill

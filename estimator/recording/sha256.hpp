#pragma once

// SHA-256 (FIPS 180-4) of bytes that come in pieces, by the system's crypto library.

#include <cstddef>
#include <memory>
#include <string>

struct evp_md_ctx_st;

namespace softsill {

class Sha256 {
 public:
  Sha256();
  void add(const char* bytes, std::size_t count);
  /// Lower-case hexadecimal; nothing may be added afterwards.
  std::string finish();

 private:
  std::unique_ptr<evp_md_ctx_st, void (*)(evp_md_ctx_st*)> context_;
};

}  // namespace softsill

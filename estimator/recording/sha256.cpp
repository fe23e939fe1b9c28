#include "estimator/recording/sha256.hpp"

#include <openssl/evp.h>

#include <array>

#include "softsill/error.hpp"

namespace softsill {

Sha256::Sha256() : context_(EVP_MD_CTX_new(), &EVP_MD_CTX_free) {
  if (!context_ || EVP_DigestInit_ex(context_.get(), EVP_sha256(), nullptr) != 1) {
    throw InternalError("SHA-256 is not available from the crypto library");
  }
}

void Sha256::add(const char* bytes, std::size_t count) {
  if (EVP_DigestUpdate(context_.get(), bytes, count) != 1) {
    throw InternalError("the crypto library refused to hash");
  }
}

std::string Sha256::finish() {
  std::array<unsigned char, EVP_MAX_MD_SIZE> digest;
  unsigned int length = 0;
  if (EVP_DigestFinal_ex(context_.get(), digest.data(), &length) != 1) {
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

#include "quotes/digest.h"

#include <fmt/format.h>
#include <openssl/evp.h>

#include <array>
#include <cstdio>

namespace duskgrid::quotes {
namespace {

EVP_MD_CTX* as_context(void* p) { return static_cast<EVP_MD_CTX*>(p); }

}  // namespace

void Sha256::End::operator()(void* context) const { EVP_MD_CTX_free(as_context(context)); }

Sha256::Sha256() : context_(EVP_MD_CTX_new()) {
  EVP_DigestInit_ex(as_context(context_.get()), EVP_sha256(), nullptr);
}

void Sha256::add(std::string_view bytes) {
  EVP_DigestUpdate(as_context(context_.get()), bytes.data(), bytes.size());
}

std::string Sha256::hex() {
  std::array<unsigned char, EVP_MAX_MD_SIZE> sum{};
  unsigned int size = 0;
  EVP_DigestFinal_ex(as_context(context_.get()), sum.data(), &size);
  std::string out;
  for (unsigned int i = 0; i < size; ++i) out += fmt::format("{:02x}", sum[i]);
  return out;
}

Result<FileDigest> digest_file(const std::string& path) {
  const std::unique_ptr<std::FILE, int (*)(std::FILE*)> file(std::fopen(path.c_str(), "rb"),
                                                             &std::fclose);
  if (!file) return Failure{Fault::no_input, path, "cannot be opened for reading"};
  Sha256 sum;
  std::int64_t bytes = 0;
  std::array<char, 1 << 16> block{};
  while (const std::size_t n = std::fread(block.data(), 1, block.size(), file.get())) {
    sum.add({block.data(), n});
    bytes += static_cast<std::int64_t>(n);
  }
  if (std::ferror(file.get())) return Failure{Fault::no_input, path, "cannot be read to its end"};
  return FileDigest{sum.hex(), bytes};
}

}  // namespace duskgrid::quotes

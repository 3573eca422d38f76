#include "publish/digest.h"

#include <gtest/gtest.h>

#include <filesystem>
#include <fstream>

namespace duskgrid::publish {
namespace {

std::string sum_of(std::string_view text) {
  Sha256 sum;
  sum.add(text);
  return sum.hex();
}

// Messages and digests of the examples that go with FIPS 180-4 (NIST, "SHA-256 example
// values"; the first two are also in FIPS 180-2, appendix B.1 and B.2, the third in B.3).
constexpr std::string_view kOneBlock = "abc";
constexpr std::string_view kOneBlockSum =
    "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad";
constexpr std::string_view kTwoBlocks = "abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq";
constexpr std::string_view kTwoBlocksSum =
    "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1";
constexpr std::size_t kLong = 1'000'000;  // times the letter a
constexpr std::string_view kLongSum =
    "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0";
// Of no bytes: the zero-length message of NIST's SHA test vectors (SHA256ShortMsg.rsp, Len = 0).
constexpr std::string_view kEmptySum =
    "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855";

TEST(Sha256, PublishedExamplesHaveTheirDigests) {
  EXPECT_EQ(sum_of(kOneBlock), kOneBlockSum);
  EXPECT_EQ(sum_of(kTwoBlocks), kTwoBlocksSum);
  EXPECT_EQ(sum_of(std::string(kLong, 'a')), kLongSum);
  EXPECT_EQ(sum_of(""), kEmptySum);
}

TEST(Sha256, BytesInPiecesSumAsTheWhole) {
  Sha256 sum;
  for (const char c : kTwoBlocks) sum.add({&c, 1});
  sum.add("");
  EXPECT_EQ(sum.hex(), kTwoBlocksSum);
}

class DigestFileTest : public testing::Test {
 protected:
  void TearDown() override { std::filesystem::remove(path_); }
  std::string path_ = testing::TempDir() + "digest_test_" +
                      testing::UnitTest::GetInstance()->current_test_info()->name();
};

TEST_F(DigestFileTest, FileOverSeveralReadsHasTheDigestAndSizeOfItsBytes) {
  std::ofstream(path_, std::ios::binary) << std::string(kLong, 'a');
  const auto digest = digest_file(path_);
  ASSERT_TRUE(digest.ok());
  EXPECT_EQ(digest->sha256, kLongSum);
  EXPECT_EQ(digest->bytes, static_cast<std::int64_t>(kLong));
}

TEST_F(DigestFileTest, EmptyFileHasTheDigestOfNoBytes) {
  std::ofstream{path_};
  const auto digest = digest_file(path_);
  ASSERT_TRUE(digest.ok());
  EXPECT_EQ(digest->sha256, kEmptySum);
  EXPECT_EQ(digest->bytes, 0);
}

TEST_F(DigestFileTest, MissingFileIsNoInputAndNamed) {
  const auto digest = digest_file(path_);
  ASSERT_FALSE(digest.ok());
  EXPECT_EQ(digest.failure().fault, Fault::no_input);
  EXPECT_EQ(digest.failure().where, path_);
}

TEST_F(DigestFileTest, FolderIsNoInput) {
  const auto digest = digest_file(testing::TempDir());
  ASSERT_FALSE(digest.ok());
  EXPECT_EQ(digest.failure().fault, Fault::no_input);
}

}  // namespace
}  // namespace duskgrid::publish

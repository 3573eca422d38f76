#include "quotes/bytes.h"

#include <gtest/gtest.h>
#include <unistd.h>

#include <algorithm>
#include <boost/iostreams/copy.hpp>
#include <boost/iostreams/device/array.hpp>
#include <boost/iostreams/device/back_inserter.hpp>
#include <boost/iostreams/filter/gzip.hpp>
#include <boost/iostreams/filter/zstd.hpp>
#include <boost/iostreams/filtering_stream.hpp>
#include <filesystem>
#include <fstream>
#include <string>

namespace duskgrid::quotes {
namespace {

template <class Compressor>
std::string compressed(const std::string& text) {
  std::string packed;
  boost::iostreams::filtering_ostream out;
  out.push(Compressor());
  out.push(boost::iostreams::back_inserter(packed));
  boost::iostreams::copy(boost::iostreams::array_source(text.data(), text.size()), out);
  return packed;
}
std::string gzip(const std::string& text) {
  return compressed<boost::iostreams::gzip_compressor>(text);
}
std::string zstd(const std::string& text) {
  return compressed<boost::iostreams::zstd_compressor>(text);
}

std::string written(const std::string& bytes) {
  const std::string path = testing::TempDir() + std::to_string(::getpid()) + "bytes_test.csv";
  std::ofstream(path, std::ios::binary) << bytes;
  return path;
}

struct Read {
  std::string text;
  std::optional<Failure> failure;
  std::string compression;
  std::int64_t stored = 0;
};

Read read_all(const std::string& bytes, std::size_t piece = 1000) {
  auto opened = TextSource::open(written(bytes));
  if (!opened) return {{}, opened.failure(), {}, 0};
  TextSource& source = **opened;
  Read read;
  std::string buffer(piece, '\0');
  while (const std::size_t got = source.read(buffer.data(), piece))
    read.text.append(buffer, 0, got);
  read.failure = source.failure();
  read.compression = source.compression();
  read.stored = source.stored_bytes();
  return read;
}

std::string long_text() {
  std::string text;
  for (int i = 0; i < 20000; ++i) text += std::to_string(i * 7919 % 104729) + "\n";
  return text;
}

TEST(TextSource, PlainTextComesThroughWithALastLineFeed) {
  const Read read = read_all("a,b\n1,2");
  EXPECT_EQ(read.text, "a,b\n1,2\n");
  EXPECT_EQ(read.compression, "none");
  EXPECT_EQ(read.stored, 7);
  EXPECT_FALSE(read.failure);
}

TEST(TextSource, CompressionIsKnownByContent) {
  const std::string text = long_text();
  const Read zipped = read_all(gzip(text));
  EXPECT_EQ(zipped.text, text);
  EXPECT_EQ(zipped.compression, "gzip");
  EXPECT_EQ(zipped.stored, static_cast<std::int64_t>(gzip(text).size()));
  const Read zstandard = read_all(zstd(text));
  EXPECT_EQ(zstandard.text, text);
  EXPECT_EQ(zstandard.compression, "zstd");
  EXPECT_EQ(zstandard.stored, static_cast<std::int64_t>(zstd(text).size()));
}

// Every piece size near the text's own, so that the end falls on, before and after the
// end of a piece.
TEST(TextSource, TextIsTheSameWhateverThePieces) {
  const std::string text = "a,b\n1,2\n3,4";
  for (const std::string& bytes : {text, gzip(text), zstd(text)}) {
    for (std::size_t piece = 1; piece < 16; ++piece) {
      const Read read = read_all(bytes, piece);
      EXPECT_EQ(read.text, text + "\n") << "pieces of " << piece;
      EXPECT_FALSE(read.failure) << "pieces of " << piece;
    }
  }
}

TEST(TextSource, SeveralMembersOrFramesAreOneText) {
  EXPECT_EQ(read_all(gzip("a,b\n") + gzip("1,2\n") + gzip("3,4\n")).text, "a,b\n1,2\n3,4\n");
  EXPECT_EQ(read_all(zstd("a,b\n") + zstd("1,2\n")).text, "a,b\n1,2\n");
}

// The filter reads 64 KiB at a time. Members of random-looking text, ending at every
// offset about that boundary, once lost the second member.
TEST(TextSource, MemberEndingAtTheFilterBufferIsFollowedByTheNext) {
  const std::string second = gzip("last line\n");
  std::string text;
  std::uint32_t state = 1;
  while (text.size() < 120000) {
    state = state * 1664525U + 1013904223U;
    text += static_cast<char>('!' + (state >> 24) % 90);
    if (text.size() % 80 == 79) text += '\n';
  }
  const auto wanted = std::size_t{1} << 16;
  int near = 0;
  for (std::size_t size = 60000; size < text.size(); size += 16) {
    const std::string first = gzip(text.substr(0, size));
    if (first.size() + 40 < wanted || first.size() > wanted + 40) continue;
    ++near;
    const Read read = read_all(first + second, 1 << 18);
    EXPECT_FALSE(read.failure);
    EXPECT_EQ(read.text.size(), size + 10);
  }
  EXPECT_GT(near, 0);
}

TEST(TextSource, CompressionCutOffAnywhereIsNoQuotes) {
  const std::string text = "a,b\n1,2\n3,4\n";
  for (const std::string& whole : {gzip(text), zstd(text)}) {
    for (std::size_t size = 4; size < whole.size(); ++size) {
      const Read read = read_all(whole.substr(0, size));
      ASSERT_TRUE(read.failure) << size << " of " << whole.size();
      EXPECT_EQ(read.failure->fault, Fault::not_quotes);
    }
  }
}

TEST(TextSource, ByteChangedInsideTheCompressionIsNeverATextOfItsOwn) {
  const std::string text = long_text();
  std::string damaged = gzip(text);
  damaged[damaged.size() / 2] = static_cast<char>(damaged[damaged.size() / 2] ^ 0x10);
  EXPECT_TRUE(read_all(damaged).failure);
}

TEST(TextSource, TrailingBytesBehindTheCompressionAreDamage) {
  EXPECT_TRUE(read_all(gzip("a,b\n") + "junk").failure);
  EXPECT_TRUE(read_all(zstd("a,b\n") + "junk").failure);
}

TEST(TextSource, EmptyFileHasNoText) {
  const Read read = read_all("");
  EXPECT_FALSE(read.failure);
  EXPECT_TRUE(read.text.empty());
}

TEST(TextSource, MissingFileAndFolderAreNoInput) {
  const auto missing = TextSource::open(testing::TempDir() + "no_such_file.csv");
  ASSERT_FALSE(missing.ok());
  EXPECT_EQ(missing.failure().fault, Fault::no_input);
  const auto folder = TextSource::open(testing::TempDir());
  ASSERT_FALSE(folder.ok());
  EXPECT_EQ(folder.failure().fault, Fault::no_input);
  EXPECT_NE(folder.failure().detail.find("folder"), std::string::npos);
  EXPECT_FALSE(TextSource::open("").ok());
  EXPECT_FALSE(TextSource::open(std::string("a\0b", 3)).ok());
}

TEST(TextSource, OtherEncodingIsNamedEvenInsideCompression) {
  const std::string utf16(
      "\xFF\xFE"
      "a\0,\0b\0",
      8);
  for (const std::string& bytes : {utf16, gzip(utf16)}) {
    const Read read = read_all(bytes);
    ASSERT_TRUE(read.failure);
    EXPECT_EQ(read.failure->fault, Fault::not_quotes);
    EXPECT_NE(read.failure->detail.find("UTF-16"), std::string::npos);
  }
}

TEST(TextSource, NulByteIsRefusedInEveryCompression) {
  const std::string text("a,b\n1\0,2\n", 9);
  std::string last("a,b\n1,2\n\0", 9);
  for (const std::string& bytes : {text, gzip(text), zstd(text), last, gzip(last), zstd(last)}) {
    const Read read = read_all(bytes);
    ASSERT_TRUE(read.failure);
    EXPECT_NE(read.failure->detail.find("NUL"), std::string::npos) << read.failure->detail;
  }
}

}  // namespace
}  // namespace duskgrid::quotes

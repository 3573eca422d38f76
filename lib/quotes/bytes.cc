#include "quotes/bytes.h"

#include <algorithm>
#include <array>
#include <boost/iostreams/filter/zlib.hpp>
#include <boost/iostreams/filter/zstd.hpp>
#include <cerrno>
#include <cstdio>
#include <cstring>
#include <filesystem>
#include <utility>

#include "quotes/digest.h"
#include "quotes/encoding.h"

namespace duskgrid::quotes {
namespace {

using namespace std::string_view_literals;
namespace streams = boost::iostreams;

// The first bytes of each format: RFC 1952 section 2.3.1 and RFC 8878 section 3.1.
constexpr std::string_view kGzipMagic = "\x1F\x8B"sv;
constexpr std::string_view kZstdMagic = "\x28\xB5\x2F\xFD"sv;

// A whole zstd frame (RFC 8878 section 3.1.1) that holds one NUL byte. Boost's filter
// ends quietly when its input stops inside a frame, so this frame is put behind the
// file: its NUL comes out last only if every frame before it was complete. A text
// has no NUL of its own, so none can be mistaken for it.
constexpr std::string_view kEndFrame = "\x28\xB5\x2F\xFD\x20\x01\x09\0\0\0"sv;

struct CloseFile {
  void operator()(std::FILE* file) const { std::fclose(file); }
};

// The stored bytes of the file, as a source for Boost's filters, which copy what they
// are given: hence the pointer in StoredSource.
struct StoredBytes {
  std::unique_ptr<std::FILE, CloseFile> file;
  std::string ahead;   // given before the file's own bytes
  std::string behind;  // given after them
  std::size_t behind_given = 0;
  std::int64_t count = 0;
  Sha256 sum;           // of the bytes counted
  bool broken = false;  // the system refused to read on

  std::size_t from_file(char* to, std::size_t size) {
    const std::size_t got = std::fread(to, 1, size, file.get());
    broken = broken || std::ferror(file.get()) != 0;
    count += static_cast<std::int64_t>(got);
    sum.add({to, got});
    return got;
  }

  std::size_t read(char* to, std::size_t size) {
    if (!ahead.empty()) {
      const std::size_t given = ahead.copy(to, size);
      ahead.erase(0, given);
      return given;
    }
    if (const std::size_t got = from_file(to, size); got > 0) return got;
    const std::size_t given = behind.copy(to, size, behind_given);
    behind_given += given;
    return given;
  }
};

struct StoredSource {
  using char_type = char;
  using category = streams::source_tag;
  StoredBytes* stored;
  std::streamsize read(char* to, std::streamsize size) {
    const std::size_t got = stored->read(to, static_cast<std::size_t>(size));
    return got > 0 ? static_cast<std::streamsize>(got) : -1;
  }
};

// One member of a gzip file. Boost's gzip filter fails on a second member that starts
// where its buffer ends; zlib reads the gzip frame itself when 16 is added to the
// window bits (zlib.h, inflateInit2), and the bytes left over start the next member.
class GzipMember : public streams::zlib_decompressor {
 public:
  GzipMember() : streams::zlib_decompressor(params(), 1 << 16) {}
  std::string left_over() const { return unconsumed_input(); }

 private:
  static streams::zlib_params params() {
    streams::zlib_params params;
    params.window_bits = 15 + 16;
    return params;
  }
};

enum class Compression { none, gzip, zstd };
constexpr std::array<const char*, 3> kCompressionWords{"none", "gzip", "zstd"};

Compression compression_of(std::string_view start) {
  if (start.starts_with(kGzipMagic)) return Compression::gzip;
  if (start.starts_with(kZstdMagic)) return Compression::zstd;
  return Compression::none;
}

// Decompressed bytes, unchecked. read() returns 0 at the end and throws what zlib
// and zstd throw when the compression is damaged.
class Decompressor {
 public:
  Decompressor(StoredBytes& stored, Compression compression)
      : stored_(stored), compression_(compression) {
    if (compression == Compression::gzip) member_ = std::make_unique<GzipMember>();
    if (compression != Compression::zstd) return;
    stored.behind = kEndFrame;
    frames_ = std::make_unique<streams::zstd_decompressor>(1 << 16);
  }

  std::size_t read(char* to, std::size_t size) {
    if (compression_ == Compression::none) return stored_.read(to, size);
    if (compression_ == Compression::gzip) return read_gzip(to, size);
    return read_zstd(to, size);
  }

 private:
  std::size_t read_gzip(char* to, std::size_t size) {
    while (member_) {
      StoredSource source{&stored_};
      const std::streamsize got = member_->read(source, to, static_cast<std::streamsize>(size));
      if (got > 0) return static_cast<std::size_t>(got);
      if (got < 0) next_member();
    }
    return 0;
  }

  void next_member() {
    stored_.ahead.insert(0, member_->left_over());
    char byte;
    const bool more = stored_.read(&byte, 1) == 1;
    member_.reset();
    if (!more) return;
    stored_.ahead.insert(0, 1, byte);
    member_ = std::make_unique<GzipMember>();
  }

  std::size_t read_zstd(char* to, std::size_t size) {
    StoredSource source{&stored_};
    const std::streamsize got = frames_->read(source, to, static_cast<std::streamsize>(size));
    return got > 0 ? static_cast<std::size_t>(got) : 0;
  }

  StoredBytes& stored_;
  Compression compression_;
  std::unique_ptr<GzipMember> member_;
  std::unique_ptr<streams::zstd_decompressor> frames_;
};

class CheckedText final : public TextSource {
 public:
  CheckedText(std::string path, StoredBytes stored, Compression compression)
      : path_(std::move(path)),
        stored_(std::move(stored)),
        compression_(compression),
        word_(kCompressionWords[static_cast<std::size_t>(compression)]),
        bytes_(stored_, compression) {}

  std::size_t read(char* to, std::size_t size) override {
    if (ended_ || size == 0) return 0;
    std::size_t filled = fill(to, size);
    if (first_) refuse_foreign({to, filled});
    if (!failure_ && !check_.feed({to, filled})) refuse_text();
    if (!failure_ && ended_ && !check_.finish()) refuse_text();
    if (failure_) filled = 0;
    if (filled > 0) last_ = to[filled - 1];
    // Also after a failure: the line reader runs past a text that ends without one.
    if (ended_ && last_ != '\n' && filled < size) to[filled++] = '\n';
    return filled;
  }

  const std::optional<Failure>& failure() const override { return failure_; }
  const std::string& compression() const override { return word_; }
  std::int64_t stored_bytes() const override { return stored_.count; }
  std::string sha256() override { return stored_.sum.hex(); }

 private:
  // All of `size` unless the text ends, which shows only when there is room left.
  std::size_t fill(char* to, std::size_t size) {
    std::size_t filled = 0;
    try {
      while (filled < size && !ended_) {
        const std::size_t got = bytes_.read(to + filled, size - filled);
        filled += got;
        ended_ = got == 0;
      }
      if (compression_ == Compression::zstd) drop_end_mark(to, filled);
    } catch (const std::bad_alloc&) {
      throw;
    } catch (const std::exception&) {
      refuse("its " + word_ + " compression is damaged or cut off; fetch the file again");
    }
    if (stored_.broken) {
      refuse("reading stopped with an error of the system", Fault::no_input);
    }
    return filled;
  }

  void drop_end_mark(char* to, std::size_t& filled) {
    const bool mark = filled > 0 && to[filled - 1] == '\0';
    char byte;
    if (mark && !ended_) ended_ = bytes_.read(&byte, 1) == 0;
    if (!ended_) return;
    if (!mark) {
      refuse("its zstd compression is damaged or cut off; fetch the file again");
    } else {
      --filled;
    }
  }

  void refuse_foreign(std::string_view start) {
    first_ = false;
    const auto encoding = foreign_encoding(start);
    if (!encoding || failure_) return;
    refuse("is " + std::string(*encoding) + " text; save it as UTF-8");
  }

  void refuse_text() {
    refuse(check_.problem() + "; a quote file is UTF-8 text (CSV), plain or as gzip or zstd");
  }

  void refuse(std::string detail, Fault fault = Fault::not_quotes) {
    ended_ = true;
    if (!failure_) failure_ = Failure{fault, path_, std::move(detail)};
  }

  std::string path_;
  StoredBytes stored_;
  Compression compression_;
  std::string word_;
  Decompressor bytes_;
  TextCheck check_;
  std::optional<Failure> failure_;
  bool first_ = true;
  bool ended_ = false;
  char last_ = '\n';
};

Failure no_input(const std::string& path, std::string detail) {
  return {Fault::no_input, path, std::move(detail)};
}

}  // namespace

Result<std::unique_ptr<TextSource>> TextSource::open(const std::string& path) {
  std::error_code error;
  const auto status = std::filesystem::status(path, error);
  if (path.empty() || path.find('\0') != std::string::npos || !std::filesystem::exists(status)) {
    return no_input(
        path,
        "no such file; a path in a configuration starts at its folder, any other at the folder "
        "the command runs in");
  }
  if (std::filesystem::is_directory(status)) {
    return no_input(path, "is a folder; name the files in it, such as " + path + "/*.csv");
  }
  if (!std::filesystem::is_regular_file(status)) return no_input(path, "is not a file");
  StoredBytes stored;
  stored.file.reset(std::fopen(path.c_str(), "rb"));
  if (!stored.file) {
    return no_input(path, std::string("cannot be read: ") + std::strerror(errno));
  }
  // Four bytes tell the formats apart; they are given again.
  std::array<char, 4> start;
  const std::size_t known = stored.from_file(start.data(), start.size());
  if (stored.broken) return no_input(path, "cannot be read: an error of the system");
  stored.ahead.assign(start.data(), known);
  const Compression compression = compression_of(stored.ahead);
  return std::unique_ptr<TextSource>(
      std::make_unique<CheckedText>(path, std::move(stored), compression));
}

}  // namespace duskgrid::quotes

#include "io/gzip.h"

#include <algorithm>
#include <array>
#include <cerrno>
#include <cstddef>
#include <cstdlib>
#include <fcntl.h>
#include <filesystem>
#include <fmt/format.h>
#include <span>
#include <string>
#include <unistd.h>
#include <utility>
#include <vector>
#include <zlib.h>

#include "core/error.h"

namespace straymark::io {
namespace {

constexpr std::size_t kChunkBytes = 1 << 18;
constexpr int kGzipOnly = 16 + MAX_WBITS;  // zlib.h, inflateInit2

FileHandle nameless_file(const std::string& for_path) {
    std::error_code error;
    const std::string folder = std::filesystem::temp_directory_path(error).string();
    FileHandle handle(
        ::open(error ? "/tmp" : folder.c_str(), O_TMPFILE | O_RDWR | O_CLOEXEC, 0600));
    if (handle.get() < 0) {
        throw SystemError(for_path, "make a temporary file to expand it", errno);
    }
    return handle;
}

void append(int descriptor, std::span<const std::byte> bytes, const std::string& for_path) {
    while (!bytes.empty()) {
        const ssize_t done = ::write(descriptor, bytes.data(), bytes.size());
        if (done < 0 && errno == EINTR) {
            continue;
        }
        if (done < 0) {
            throw SystemError(for_path, "expand into a temporary file", errno);
        }
        bytes = bytes.subspan(static_cast<std::size_t>(done));
    }
}

/// zlib's stream, which frees itself.
class Inflater {
public:
    Inflater() {
        if (::inflateInit2(&stream_, kGzipOnly) != Z_OK) {
            throw std::bad_alloc();
        }
    }
    ~Inflater() { ::inflateEnd(&stream_); }
    Inflater(const Inflater&) = delete;
    Inflater& operator=(const Inflater&) = delete;
    z_stream& stream() { return stream_; }

private:
    z_stream stream_{};
};

}  // namespace

bool is_gzip(const InputFile& file) {
    std::array<std::byte, 3> start{};
    if (file.size() < static_cast<std::int64_t>(start.size())) {
        return false;
    }
    file.read_at(0, start);
    return start == std::array{std::byte{0x1F}, std::byte{0x8B}, std::byte{8}};
}

InputFile expanded(const InputFile& file, std::int64_t limit_bytes) {
    const auto refuse = [&](std::int64_t at, const std::string& found) {
        throw InputError({file.path(), fmt::format("gzip data near byte {}", at), found,
                          "a complete gzip file", "this file is corrupt; fetch it again"});
    };
    FileHandle out = nameless_file(file.path());
    Inflater inflater;
    z_stream& stream = inflater.stream();
    std::vector<std::byte> packed(kChunkBytes);
    std::vector<std::byte> plain(kChunkBytes);
    std::int64_t at = 0;
    std::int64_t total = 0;
    int status = Z_OK;
    while (at < file.size()) {
        const auto length = static_cast<std::size_t>(
            std::min(static_cast<std::int64_t>(kChunkBytes), file.size() - at));
        file.read_at(at, std::span(packed).first(length));
        stream.next_in = reinterpret_cast<Bytef*>(packed.data());
        stream.avail_in = static_cast<uInt>(length);
        at += static_cast<std::int64_t>(length);
        do {
            if (status == Z_STREAM_END) {
                // Members may follow each other (RFC 1952, section 2.2); padding may end the file.
                if (stream.avail_in == 0 || *stream.next_in == 0) {
                    break;
                }
                ::inflateReset(&stream);
            }
            stream.next_out = reinterpret_cast<Bytef*>(plain.data());
            stream.avail_out = static_cast<uInt>(plain.size());
            status = ::inflate(&stream, Z_NO_FLUSH);
            if (status != Z_OK && status != Z_STREAM_END && status != Z_BUF_ERROR) {
                refuse(at, stream.msg != nullptr ? stream.msg : "damaged data");
            }
            const std::size_t made = plain.size() - stream.avail_out;
            total += static_cast<std::int64_t>(made);
            if (total > limit_bytes) {
                throw InputError({file.path(), "gzip data",
                                  fmt::format("more than {} bytes in {} compressed ones",
                                              limit_bytes, file.size()),
                                  "no more than an exposure of this camera can hold",
                                  "this is not a raw exposure of this camera"});
            }
            append(out.get(), std::span(plain).first(made), file.path());
        } while (stream.avail_in > 0 || stream.avail_out == 0);
    }
    if (status != Z_STREAM_END) {
        refuse(at, "the end of the file");
    }
    return {std::move(out), file.path()};
}

}  // namespace straymark::io

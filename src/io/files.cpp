#include "io/files.h"

#include <algorithm>
#include <array>
#include <atomic>
#include <cerrno>
#include <cstdio>
#include <fcntl.h>
#include <filesystem>
#include <fmt/format.h>
#include <memory>
#include <sys/file.h>
#include <sys/stat.h>
#include <sys/uio.h>
#include <system_error>
#include <unistd.h>
#include <utility>
#include <xxhash.h>

#include "core/error.h"

namespace straymark::io {
namespace {

FileFault& file_fault() {
    static FileFault fault;
    return fault;
}

/// Throws what the operating system, or a test in its place, said.
void check(bool succeeded, FileOperation operation, const std::string& path, const char* action) {
    const int error = succeeded ? 0 : errno;
    const FileFault& fault = file_fault();
    const int injected = fault ? fault(operation, path) : 0;
    if (error != 0 || injected != 0) {
        throw SystemError(path, action, error != 0 ? error : injected);
    }
}

std::string hex(const XXH128_hash_t& hash) {
    return fmt::format("xxh128:{:016x}{:016x}", hash.high64, hash.low64);
}

constexpr const char* kPartialEnding = ".partial";

bool is_unlinked(int descriptor) {
    struct stat status {};
    return ::fstat(descriptor, &status) == 0 && status.st_nlink == 0;
}

std::string folder_of(const std::string& path) {
    const std::string folder = std::filesystem::path(path).parent_path().string();
    return folder.empty() ? "." : folder;
}

}  // namespace

void set_file_fault(FileFault fault) {
    file_fault() = std::move(fault);
}

FileHandle::~FileHandle() {
    if (descriptor_ >= 0) {
        ::close(descriptor_);
    }
}

FileHandle::FileHandle(FileHandle&& other) noexcept
    : descriptor_(std::exchange(other.descriptor_, -1)) {}

FileHandle& FileHandle::operator=(FileHandle&& other) noexcept {
    std::swap(descriptor_, other.descriptor_);
    return *this;
}

InputFile::InputFile(std::string path) : path_(std::move(path)) {
    // O_NONBLOCK: opening a FIFO must not wait for its writer.
    handle_ = FileHandle(::open(path_.c_str(), O_RDONLY | O_CLOEXEC | O_NONBLOCK | O_NOCTTY));
    if (handle_.get() < 0) {
        throw InputError({path_, "", std::generic_category().message(errno),
                          "a file that can be read", "check the name and its permissions"});
    }
    take_size();
}

InputFile::InputFile(FileHandle handle, std::string path)
    : path_(std::move(path)), handle_(std::move(handle)) {
    take_size();
}

void InputFile::take_size() {
    struct stat status {};
    if (::fstat(handle_.get(), &status) != 0 || !S_ISREG(status.st_mode)) {
        throw InputError({path_, "", S_ISDIR(status.st_mode) ? "a folder" : "a pipe or device",
                          "a regular file", "give the file itself"});
    }
    size_ = status.st_size;
}

void InputFile::read_at(std::int64_t offset, std::span<std::byte> out) const {
    while (!out.empty()) {
        const ssize_t got = ::pread(handle_.get(), out.data(), out.size(), offset);
        if (got < 0 && errno == EINTR) {
            continue;
        }
        if (got < 0) {
            throw SystemError(path_, "read", errno);
        }
        if (got == 0) {
            throw InputError({path_, fmt::format("byte {}", offset), "end of file",
                              fmt::format("{} more bytes", out.size()),
                              "the file is truncated; fetch it again"});
        }
        offset += got;
        out = out.subspan(static_cast<std::size_t>(got));
    }
}

std::string read_text(const std::string& path, std::int64_t limit_bytes) {
    const InputFile file(path);
    if (file.size() > limit_bytes) {
        throw InputError({path, "", fmt::format("{} bytes", file.size()),
                          fmt::format("at most {}", limit_bytes), "this is not such a file"});
    }
    std::string text(static_cast<std::size_t>(file.size()), '\0');
    file.read_at(0, std::as_writable_bytes(std::span(text)));
    return text;
}

std::string file_digest(const InputFile& file) {
    const std::unique_ptr<XXH3_state_t, decltype(&XXH3_freeState)> state(XXH3_createState(),
                                                                         &XXH3_freeState);
    XXH3_128bits_reset(state.get());
    constexpr std::int64_t kBlock = 1 << 18;
    std::vector<std::byte> block(static_cast<std::size_t>(std::min(kBlock, file.size())));
    for (std::int64_t offset = 0; offset < file.size(); offset += kBlock) {
        const auto length = static_cast<std::size_t>(std::min(kBlock, file.size() - offset));
        const std::span<std::byte> part = std::span(block).first(length);
        file.read_at(offset, part);
        XXH3_128bits_update(state.get(), part.data(), part.size());
    }
    return hex(XXH3_128bits_digest(state.get()));
}

std::string bytes_digest(std::span<const std::byte> bytes) {
    return hex(XXH3_128bits(bytes.data(), bytes.size()));
}

OutputFile::OutputFile(std::string path) : path_(std::move(path)) {
    check(true, FileOperation::create, path_, "create");
    create();
    while (::flock(handle_.get(), LOCK_EX) == 0 && is_unlinked(handle_.get())) {
        create();  // somebody took it for left behind before it was locked
    }
}

void OutputFile::create() {
    static std::atomic<unsigned> serial{0};
    const std::filesystem::path final_path(path_);
    temporary_path_ = (std::filesystem::path(folder_of(path_)) /
                       fmt::format(".{}.{}-{}{}", final_path.filename().string(), ::getpid(),
                                   serial.fetch_add(1), kPartialEnding))
                          .string();
    handle_ = FileHandle(
        ::open(temporary_path_.c_str(), O_RDWR | O_CREAT | O_EXCL | O_CLOEXEC | O_NOFOLLOW, 0644));
    if (handle_.get() < 0) {
        throw SystemError(path_, "create", errno);
    }
}

void remove_left_behind(const std::string& folder) {
    std::error_code error;
    for (const auto& entry : std::filesystem::directory_iterator(folder, error)) {
        const std::string name = entry.path().filename().string();
        if (!name.starts_with('.') || !name.ends_with(kPartialEnding)) {
            continue;
        }
        const FileHandle file(
            ::open(entry.path().c_str(), O_RDWR | O_CLOEXEC | O_NOFOLLOW | O_NONBLOCK));
        if (file.get() >= 0 && ::flock(file.get(), LOCK_EX | LOCK_NB) == 0) {
            ::unlink(entry.path().c_str());  // its writer is dead, or it would hold the lock
        }
    }
}

OutputFile::~OutputFile() {
    if (!committed_ && handle_.get() >= 0) {
        ::unlink(temporary_path_.c_str());
    }
}

void OutputFile::write(std::span<const std::byte> bytes) {
    const std::array pieces{bytes};
    write_all(pieces);
}

void OutputFile::write_all(std::span<const std::span<const std::byte>> pieces) {
    constexpr std::size_t kMostPieces = 512;
    while (!pieces.empty()) {
        const std::size_t count = std::min(pieces.size(), kMostPieces);
        std::vector<iovec> vectors(count);
        for (std::size_t i = 0; i < count; ++i) {
            // writev does not write through iov_base, whose type predates const.
            vectors[i] = {const_cast<std::byte*>(pieces[i].data()), pieces[i].size()};
        }
        std::size_t first = 0;
        while (first < count) {
            const ssize_t done =
                ::writev(handle_.get(), vectors.data() + first, static_cast<int>(count - first));
            if (done < 0 && errno == EINTR) {
                continue;
            }
            check(done >= 0, FileOperation::write, path_, "write");
            auto left = static_cast<std::size_t>(done);
            while (first < count && left >= vectors[first].iov_len) {
                left -= vectors[first++].iov_len;
            }
            if (first < count) {
                vectors[first].iov_base = static_cast<std::byte*>(vectors[first].iov_base) + left;
                vectors[first].iov_len -= left;
            }
        }
        pieces = pieces.subspan(count);
    }
}

void OutputFile::write_at(std::int64_t offset, std::span<const std::byte> bytes) {
    while (!bytes.empty()) {
        const ssize_t done = ::pwrite(handle_.get(), bytes.data(), bytes.size(), offset);
        if (done < 0 && errno == EINTR) {
            continue;
        }
        check(done >= 0, FileOperation::write, path_, "write");
        offset += done;
        bytes = bytes.subspan(static_cast<std::size_t>(done));
    }
}

void OutputFile::commit() {
    check(::fsync(handle_.get()) == 0, FileOperation::sync, path_, "sync");
    check(true, FileOperation::rename, path_, "rename");
    if (::rename(temporary_path_.c_str(), path_.c_str()) != 0) {
        throw SystemError(path_, "rename", errno);
    }
    committed_ = true;
    // The name itself is durable only when its folder is.
    const FileHandle folder(::open(folder_of(path_).c_str(), O_RDONLY | O_DIRECTORY | O_CLOEXEC));
    if (folder.get() >= 0 && ::fsync(folder.get()) != 0 && errno != EINVAL) {
        throw SystemError(folder_of(path_), "sync", errno);
    }
}

void write_text(const std::string& path, const std::string& text) {
    OutputFile file(path);
    file.write(std::as_bytes(std::span(text)));
    file.commit();
}

void make_folder(const std::string& path) {
    std::error_code error;
    std::filesystem::create_directories(path, error);
    if (error) {
        throw SystemError(path, "create folder", error.value());
    }
}

std::string resolved_beside(const std::string& file, const std::string& name) {
    const std::filesystem::path given(name);
    return given.is_absolute() ? name : (std::filesystem::path(folder_of(file)) / given).string();
}

}  // namespace straymark::io

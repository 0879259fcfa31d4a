#pragma once

#include <cstddef>
#include <cstdint>
#include <functional>
#include <span>
#include <string>
#include <sys/types.h>
#include <vector>

/// All that touches the file system goes through here: names are plain paths, results appear
/// complete or not at all, and tests can make any operation fail.

namespace straymark::io {

/// A file descriptor that closes itself.
class FileHandle {
public:
    FileHandle() = default;
    explicit FileHandle(int descriptor) : descriptor_(descriptor) {}
    ~FileHandle();
    FileHandle(FileHandle&& other) noexcept;
    FileHandle& operator=(FileHandle&& other) noexcept;
    FileHandle(const FileHandle&) = delete;
    FileHandle& operator=(const FileHandle&) = delete;
    [[nodiscard]] int get() const { return descriptor_; }

private:
    int descriptor_ = -1;
};

/// An open regular file. read_at is thread-safe.
class InputFile {
public:
    /// Opens exactly `path` for reading. Throws InputError where it does not exist, is not a
    /// regular file (FIFO, device, folder) or may not be read. Never waits, expands nothing.
    explicit InputFile(std::string path);
    /// Bytes that have no name of their own (what was decoded from `path`); messages name `path`.
    InputFile(FileHandle handle, std::string path);
    [[nodiscard]] const std::string& path() const { return path_; }
    [[nodiscard]] std::int64_t size() const { return size_; }  ///< when it was opened
    /// Fills `out` from `offset`. Throws InputError where the file ends first.
    void read_at(std::int64_t offset, std::span<std::byte> out) const;
    /// To hand on to a child process.
    [[nodiscard]] int descriptor() const { return handle_.get(); }

private:
    void take_size();

    std::string path_;
    FileHandle handle_;
    std::int64_t size_ = 0;
};

/// The whole of a small text file; throws InputError above `limit_bytes`.
std::string read_text(const std::string& path, std::int64_t limit_bytes);

/// "xxh128:" and 32 hexadecimal digits of all bytes: tells whether an input changed (not a seal).
std::string file_digest(const InputFile& file);
std::string bytes_digest(std::span<const std::byte> bytes);

/// A result that appears under its final name only when `commit` has returned: it is written to a
/// temporary name in the same folder, synced, and renamed; without commit nothing is left.
/// Throws SystemError (disk full, permission) with nothing under the final name changed.
class OutputFile {
public:
    explicit OutputFile(std::string path);
    ~OutputFile();
    OutputFile(const OutputFile&) = delete;
    OutputFile& operator=(const OutputFile&) = delete;
    void write(std::span<const std::byte> bytes);
    /// Several pieces by one system call where possible.
    void write_all(std::span<const std::span<const std::byte>> pieces);
    void write_at(std::int64_t offset,
                  std::span<const std::byte> bytes);  ///< over what was written
    void commit();
    /// For a library that insists on writing a named file itself; commit syncs and renames it.
    [[nodiscard]] const std::string& temporary_path() const { return temporary_path_; }

private:
    void create();
    std::string path_, temporary_path_;
    FileHandle handle_;
    bool committed_ = false;
};

/// Removes the temporary files of outputs whose writer died; those being written are locked and
/// stay.
void remove_left_behind(const std::string& folder);

void write_text(const std::string& path, const std::string& text);
/// Creates the folder and its parents.
void make_folder(const std::string& path);
/// `name` relative to the folder of `file`, unless absolute.
std::string resolved_beside(const std::string& file, const std::string& name);

/// What a test may intercept. Return 0 to go on, or an errno that the operation then fails with.
enum class FileOperation { create, write, sync, rename };
using FileFault = std::function<int(FileOperation, const std::string& path)>;
/// For tests only; pass nullptr to end it. Not to be called while other threads use files.
void set_file_fault(FileFault fault);

}  // namespace straymark::io

#include "io/fits_isolated.h"

#include <algorithm>
#include <array>
#include <cerrno>
#include <chrono>
#include <csignal>
#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <fcntl.h>
#include <fitsio.h>
#include <fmt/format.h>
#include <limits>
#include <poll.h>
#include <spawn.h>
#include <string_view>
#include <sys/mman.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <unistd.h>
#include <utility>
#include <vector>

#include "core/error.h"

namespace straymark::io {
namespace {

// The child's descriptors: its standard ones, so that nothing else is handed down.
constexpr int kCompressedFd = 0;
constexpr int kPixelsFd = 1;
constexpr int kReportFd = 2;
constexpr std::string_view kDone = "decoded\n";

/// Seconds that decoding may take, of the processor and by the clock: a hundredfold of what it
/// does.
int seconds_allowed(std::int64_t pixels) {
    constexpr std::int64_t kPixelsPerSecond = 1'000'000;
    return 20 + static_cast<int>(pixels / kPixelsPerSecond);
}

// ---- the parent's side -----------------------------------------------------------------------

[[noreturn]] void refuse(const InputFile& file, const FitsHdu& hdu, const std::string& found) {
    throw InputError({file.path(), place_of(hdu), found, "a compressed image that can be decoded",
                      "this file is corrupt; fetch it again"});
}

/// A copy of a descriptor above the standard three, which the child's own will replace.
FileHandle above_standard(int descriptor, const std::string& path) {
    FileHandle copy(::fcntl(descriptor, F_DUPFD_CLOEXEC, 3));
    if (copy.get() < 0) {
        throw SystemError(path, "hand it to the decoder", errno);
    }
    return copy;
}

class SpawnActions {
public:
    SpawnActions() { ::posix_spawn_file_actions_init(&actions_); }
    ~SpawnActions() { ::posix_spawn_file_actions_destroy(&actions_); }
    SpawnActions(const SpawnActions&) = delete;
    SpawnActions& operator=(const SpawnActions&) = delete;
    void hand_down(const FileHandle& from, int to) {
        ::posix_spawn_file_actions_adddup2(&actions_, from.get(), to);
    }
    [[nodiscard]] const posix_spawn_file_actions_t* get() const { return &actions_; }

private:
    posix_spawn_file_actions_t actions_{};
};

/// A child process that is gone when this is.
class Child {
public:
    explicit Child(pid_t id) : id_(id) {}
    ~Child() {
        if (id_ > 0) {
            ::kill(id_, SIGKILL);
            wait();
        }
    }
    Child(const Child&) = delete;
    Child& operator=(const Child&) = delete;
    /// Waits for its end; returns the status as waitpid does.
    int wait() {
        int status = 0;
        while (::waitpid(id_, &status, 0) < 0 && errno == EINTR) {
        }
        id_ = -1;
        return status;
    }

private:
    pid_t id_;
};

pid_t start(const std::string& program, std::vector<std::string> arguments,
            const SpawnActions& actions) {
    std::vector<char*> argv{const_cast<char*>(program.c_str())};
    for (std::string& argument : arguments) {
        argv.push_back(argument.data());
    }
    argv.push_back(nullptr);
    pid_t child = -1;
    const int error =
        ::posix_spawn(&child, program.c_str(), actions.get(), nullptr, argv.data(), environ);
    if (error != 0) {
        throw SystemError(program, "start as decoder", error);
    }
    return child;
}

/// What the child says until it ends; nothing where it did not end in time.
std::optional<std::string> report_of(const FileHandle& pipe, int seconds) {
    constexpr std::size_t kMostReport = 4096;
    const auto deadline = std::chrono::steady_clock::now() + std::chrono::seconds(seconds);
    std::string report;
    while (true) {
        const auto left = std::chrono::duration_cast<std::chrono::milliseconds>(
            deadline - std::chrono::steady_clock::now());
        if (left.count() <= 0) {
            return std::nullopt;
        }
        pollfd waited{pipe.get(), POLLIN, 0};
        const int ready = ::poll(&waited, 1, static_cast<int>(left.count()));
        if (ready <= 0) {
            continue;
        }
        std::array<char, 512> part{};
        const ssize_t got = ::read(pipe.get(), part.data(), part.size());
        if (got == 0) {
            return report;
        }
        if (got > 0 && report.size() < kMostReport) {
            report.append(part.data(), static_cast<std::size_t>(got));
        }
    }
}

/// An anonymous file in memory, of a fixed size.
FileHandle shared_memory(std::int64_t bytes, const std::string& path) {
    FileHandle memory(::memfd_create("decoded pixels", MFD_CLOEXEC));
    if (memory.get() < 0 || ::ftruncate(memory.get(), bytes) != 0) {
        throw SystemError(path, "make room for decoded pixels", errno);
    }
    return above_standard(memory.get(), path);
}

/// PLIO_1 is left out: it is for masks, not exposures, and overruns the library's memory when
/// damaged, often without a trace.
void check_compression(const InputFile& file, const FitsHdu& hdu) {
    constexpr std::array<std::string_view, 6> kKnown{"RICE_1", "RICE_ONE",    "GZIP_1",
                                                     "GZIP_2", "HCOMPRESS_1", "NOCOMPRESS"};
    if (std::find(kKnown.begin(), kKnown.end(), hdu.compression) == kKnown.end()) {
        throw InputError({file.path(), place_of(hdu) + ", keyword ZCMPTYPE",
                          quoted(hdu.compression), "RICE_1, GZIP_1, GZIP_2 or HCOMPRESS_1",
                          "exposures are not read from this compression; expand the file"});
    }
}

void verify_data_sum(const InputFile& file, const FitsHdu& hdu) {
    if (!hdu.data_sum) {
        return;
    }
    const std::uint32_t sum = data_checksum(file, hdu);
    if (sum != *hdu.data_sum) {
        refuse(file, hdu,
               fmt::format("data whose sum is {}, not {} as DATASUM says", sum, *hdu.data_sum));
    }
}

// ---- the child's side ------------------------------------------------------------------------

/// What the child is asked to do, as its arguments after kDecodeArgument.
struct Request {
    std::int64_t header_offset = 0;
    std::int64_t bytes = 0;  ///< header and data
    long width = 0;
    long height = 0;
    int seconds = 0;
};

std::vector<std::string> arguments_of(const Request& request) {
    return {kDecodeArgument,
            std::to_string(request.header_offset),
            std::to_string(request.bytes),
            std::to_string(request.width),
            std::to_string(request.height),
            std::to_string(request.seconds)};
}

std::optional<Request> request_of(int argc, char** argv) {
    constexpr int kArguments = 7;
    if (argc != kArguments) {
        return std::nullopt;
    }
    std::array<std::int64_t, kArguments - 2> numbers{};
    for (std::size_t i = 0; i < numbers.size(); ++i) {
        const std::optional<std::int64_t> number = CardValue{argv[i + 2], false, true}.integer();
        if (!number || *number < 0) {
            return std::nullopt;
        }
        numbers[i] = *number;
    }
    return Request{numbers[0], numbers[1], static_cast<long>(numbers[2]),
                   static_cast<long>(numbers[3]), static_cast<int>(numbers[4])};
}

void set_limit(decltype(RLIMIT_AS) resource, std::int64_t value) {
    const rlimit limit{static_cast<rlim_t>(value), static_cast<rlim_t>(value)};
    ::setrlimit(resource, &limit);
}

void limit_this_process(const Request& request, std::int64_t pixel_bytes) {
    set_limit(RLIMIT_CORE, 0);
    set_limit(RLIMIT_CPU, request.seconds);
    set_limit(RLIMIT_FSIZE, pixel_bytes);
#if !defined(__SANITIZE_ADDRESS__) && !defined(__SANITIZE_THREAD__)
    // Sanitizers reserve terabytes of addresses. Decoding needs the file's bytes, the pixels and
    // room for one tile, which may be the whole image at 8 bytes a pixel, a few times over.
    constexpr std::int64_t kOwnBytes = std::int64_t{512} << 20;
    set_limit(RLIMIT_AS, kOwnBytes + 4 * request.bytes + 10 * pixel_bytes);
#endif
}

int complain(const std::string& why) {
    const std::string line = why + "\n";
    return ::write(kReportFd, line.data(), line.size()) < 0 ? 2 : 1;
}

/// A FITS file in memory that holds the one HDU and an empty primary before it.
std::vector<char> one_hdu_file(const Request& request) {
    const std::string primary =
        fmt::format("{:<80}{:<80}{:<80}{:<80}", "SIMPLE  =                    T",
                    "BITPIX  =                    8", "NAXIS   =                    0", "END");
    const auto block = static_cast<std::size_t>(kFitsBlockBytes);
    const auto bytes = static_cast<std::size_t>(request.bytes);
    std::vector<char> file((bytes + 2 * block - 1) / block * block, '\0');
    std::fill_n(file.begin(), block, ' ');
    std::copy(primary.begin(), primary.end(), file.begin());
    const InputFile source(FileHandle(::dup(kCompressedFd)), "compressed file");
    source.read_at(request.header_offset,
                   std::as_writable_bytes(std::span(file)).subspan(block, bytes));
    return file;
}

std::string library_message(int status) {
    std::array<char, FLEN_STATUS> text{};
    fits_get_errstatus(status, text.data());
    return text.data();
}

/// Decodes into `pixels`; returns the library's status.
int decode(std::vector<char>& file, const Request& request, float* pixels) {
    int status = 0;
    void* memory = file.data();
    std::size_t size = file.size();
    fitsfile* fits = nullptr;
    fits_open_memfile(&fits, "compressed", READONLY, &memory, &size, 0, nullptr, &status);
    int type = 0;
    fits_movabs_hdu(fits, 2, &type, &status);
    int bitpix = 0;
    int axes = 0;
    std::array<long, 2> lengths{};
    fits_get_img_param(fits, 2, &bitpix, &axes, lengths.data(), &status);
    if (status == 0 && (axes != 2 || lengths[0] != request.width || lengths[1] != request.height)) {
        status = BAD_DIMEN;
    }
    float blank = std::numeric_limits<float>::quiet_NaN();
    std::array<long, 2> first{1, 1};
    int any_blank = 0;
    fits_read_pix(fits, TFLOAT, first.data(), request.width * request.height, &blank, pixels,
                  &any_blank, &status);
    int closing = 0;
    fits_close_file(fits, &closing);
    return status;
}

}  // namespace

void DecodedImage::read(const PixelBox& box, std::span<float> out) const {
    const auto width = static_cast<std::size_t>(box.width());
    const bool whole_rows = box.width() == width_;
    const std::size_t run = whole_rows ? out.size() : width;
    for (std::int64_t y = box.y0; !out.empty(); ++y) {
        pixels_.read_at((y * width_ + box.x0) * static_cast<std::int64_t>(sizeof(float)),
                        std::as_writable_bytes(out.first(run)));
        out = out.subspan(run);
    }
}

DecodedImage decode_isolated(const InputFile& file, const FitsHdu& hdu,
                             const std::string& program) {
    check_compression(file, hdu);
    verify_data_sum(file, hdu);
    const std::int64_t pixels = hdu.axes[0] * hdu.axes[1];
    const Request request{hdu.header_offset, hdu.data_offset + hdu.data_bytes - hdu.header_offset,
                          static_cast<long>(hdu.axes[0]), static_cast<long>(hdu.axes[1]),
                          seconds_allowed(pixels)};
    FileHandle memory =
        shared_memory(pixels * static_cast<std::int64_t>(sizeof(float)), file.path());
    std::array<int, 2> ends{-1, -1};
    if (::pipe2(ends.data(), O_CLOEXEC) != 0) {
        throw SystemError(file.path(), "make a pipe to the decoder", errno);
    }
    const FileHandle reading(ends[0]);
    FileHandle writing(ends[1]);
    std::optional<std::string> report;
    int status = 0;
    {
        const FileHandle compressed = above_standard(file.descriptor(), file.path());
        FileHandle reporting = above_standard(writing.get(), file.path());
        writing = FileHandle();
        SpawnActions actions;
        actions.hand_down(compressed, kCompressedFd);
        actions.hand_down(memory, kPixelsFd);
        actions.hand_down(reporting, kReportFd);
        Child child(start(program, arguments_of(request), actions));
        reporting = FileHandle();  // so that the child's end is the end of the pipe
        report = report_of(reading, request.seconds);
        if (report) {
            status = child.wait();
        }
    }
    if (!report) {
        refuse(file, hdu, fmt::format("no end of decoding in {} s", request.seconds));
    }
    if (WIFSIGNALED(status)) {
        refuse(file, hdu, fmt::format("data that kill the decoder (signal {})", WTERMSIG(status)));
    }
    if (WEXITSTATUS(status) != 0 || *report != kDone) {
        const std::string why = printable(trimmed(report->substr(0, report->find('\n'))));
        refuse(file, hdu, why.empty() ? "data that make the decoder fail" : why);
    }
    return {std::move(memory), static_cast<int>(hdu.axes[0]), static_cast<int>(hdu.axes[1]),
            file.path()};
}

int isolated_decode_main(int argc, char** argv) {
    const std::optional<Request> request = request_of(argc, argv);
    std::int64_t pixel_bytes = sizeof(float);
    if (!request || __builtin_mul_overflow(pixel_bytes, request->width, &pixel_bytes) ||
        __builtin_mul_overflow(pixel_bytes, request->height, &pixel_bytes) || pixel_bytes == 0) {
        return complain("a request that is not understood");
    }
    limit_this_process(*request, pixel_bytes);
    try {
        std::vector<char> file = one_hdu_file(*request);
        void* pixels = ::mmap(nullptr, static_cast<std::size_t>(pixel_bytes),
                              PROT_READ | PROT_WRITE, MAP_SHARED, kPixelsFd, 0);
        if (pixels == MAP_FAILED) {
            return complain("no memory for its pixels");
        }
        const int status = decode(file, *request, static_cast<float*>(pixels));
        if (status != 0) {
            return complain("data that the decoder refuses: " + library_message(status));
        }
    } catch (const std::exception& error) {
        return complain(error.what());
    }
    return ::write(kReportFd, kDone.data(), kDone.size()) == static_cast<ssize_t>(kDone.size()) ? 0
                                                                                                : 2;
}

}  // namespace straymark::io

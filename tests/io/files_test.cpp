#include "io/files.h"

#include <catch2/catch.hpp>
#include <cerrno>
#include <span>
#include <sys/stat.h>

#include "core/error.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::contents;
using straymark::test::TemporaryFolder;

namespace {

std::span<const std::byte> bytes_of(const std::string& text) {
    return std::as_bytes(std::span(text));
}

/// Makes the n-th call of one operation fail for as long as it lives; counts the calls.
class InjectedFault {
public:
    InjectedFault(FileOperation operation, int nth, int error_number) {
        set_file_fault([this, operation, nth, error_number](FileOperation at, const std::string&) {
            return at == operation && ++calls_ == nth ? error_number : 0;
        });
    }
    ~InjectedFault() { set_file_fault(nullptr); }
    InjectedFault(const InjectedFault&) = delete;
    InjectedFault& operator=(const InjectedFault&) = delete;
    [[nodiscard]] int calls() const { return calls_; }

private:
    int calls_ = 0;
};

void write_in_three_steps(const std::string& path) {
    OutputFile file(path);
    file.write(bytes_of("new "));
    const std::string a = "content";
    const std::string b = "!";
    const std::array pieces{bytes_of(a), bytes_of(b)};
    file.write_all(pieces);
    file.write_at(0, bytes_of("NEW"));
    file.commit();
}

}  // namespace

TEST_CASE("a result appears under its name only when it is complete") {
    const TemporaryFolder folder;
    const std::string path = folder.write("result.txt", "old");
    {
        OutputFile file(path);
        file.write(bytes_of("new"));
        CHECK(contents(path) == "old");
        CHECK(folder.entries() == 2);  // the temporary lies in the same folder
    }
    CHECK(contents(path) == "old");
    CHECK(folder.entries() == 1);
    write_in_three_steps(path);
    CHECK(contents(path) == "NEW content!");
    CHECK(folder.entries() == 1);
}

TEST_CASE("a failure at any operation leaves the old result and nothing else") {
    const TemporaryFolder folder;
    const std::string path = folder.write("result.txt", "old");
    for (const FileOperation operation : {FileOperation::create, FileOperation::write,
                                          FileOperation::sync, FileOperation::rename}) {
        bool failed = true;
        for (int nth = 1; failed; ++nth) {
            INFO("operation " << static_cast<int>(operation) << ", call " << nth);
            REQUIRE(nth < 10);
            const InjectedFault fault(operation, nth, ENOSPC);
            try {
                write_in_three_steps(path);
                failed = false;
                CHECK(nth > 1);  // every operation is reached, so it failed at least once
            } catch (const SystemError& error) {
                CHECK(error.error_number() == ENOSPC);
                CHECK_THAT(error.what(), Catch::Contains(path) && Catch::Contains("No space left"));
                CHECK(contents(path) == "old");
                CHECK(folder.entries() == 1);
            }
        }
        CHECK(contents(path) == "NEW content!");
        folder.write("result.txt", "old");
    }
}

TEST_CASE("many pieces arrive in order and whole") {
    const TemporaryFolder folder;
    std::vector<std::string> parts;
    std::string whole;
    for (int i = 0; i < 3000; ++i) {  // more than one system call takes
        parts.push_back(
            std::string(static_cast<std::size_t>(i % 7), static_cast<char>('a' + i % 26)));
        whole += parts.back();
    }
    std::vector<std::span<const std::byte>> pieces;
    pieces.reserve(parts.size());
    for (const std::string& part : parts) {
        pieces.push_back(bytes_of(part));
    }
    OutputFile file(folder.file("pieces"));
    file.write_all(pieces);
    file.commit();
    CHECK(contents(folder.file("pieces")) == whole);
}

TEST_CASE("only regular files are opened, and nothing waits") {
    const TemporaryFolder folder;
    const std::string fifo = folder.file("fifo");
    REQUIRE(::mkfifo(fifo.c_str(), 0600) == 0);
    CHECK_THROWS_WITH(InputFile(fifo), Catch::Contains("a pipe or device"));
    CHECK_THROWS_WITH(InputFile(folder.file(".")), Catch::Contains("a folder"));
    CHECK_THROWS_WITH(InputFile(folder.file("missing")), Catch::Contains("No such file"));
    CHECK_THROWS_WITH(InputFile("/dev/null"), Catch::Contains("a pipe or device"));
    CHECK_THROWS_WITH(InputFile(""), Catch::Contains("No such file"));
    CHECK_THROWS_WITH(InputFile("~/x"), Catch::Contains("No such file"));
}

TEST_CASE("names are plain: blanks, brackets, bars and a leading dash mean nothing") {
    const TemporaryFolder folder;
    for (const char* name : {"a b.txt", "a[1].txt", "a|b", "-leading", "a*?.txt", "\xff.txt"}) {
        write_text(folder.file(name), name);
        CHECK(read_text(folder.file(name), 100) == name);
    }
}

TEST_CASE("reading past the end says how much is missing") {
    const TemporaryFolder folder;
    const InputFile file(folder.write("short", "0123456789"));
    CHECK(file.size() == 10);
    std::array<std::byte, 4> out{};
    file.read_at(6, out);
    CHECK(static_cast<char>(out[3]) == '9');
    CHECK_THROWS_WITH(file.read_at(8, out), Catch::Contains("truncated"));
}

TEST_CASE("a text over its limit is refused before it is read") {
    const TemporaryFolder folder;
    const std::string path = folder.write("long", std::string(101, 'x'));
    CHECK_THROWS_WITH(read_text(path, 100), Catch::Contains("101 bytes"));
    CHECK(read_text(path, 101).size() == 101);
}

TEST_CASE("digests are XXH128 and tell files apart by content alone") {
    const TemporaryFolder folder;
    // `printf '' | xxh128sum` and `printf 'abc' | xxh128sum` (xxHash 0.8 command-line tool).
    CHECK(bytes_digest({}) == "xxh128:99aa06d3014798d86001c324468d497f");
    CHECK(bytes_digest(bytes_of("abc")) == "xxh128:06b05ab6733a618578af5f94892f3950");
    const std::string big(700001, 'q');  // more than two blocks
    CHECK(file_digest(InputFile(folder.write("big", big))) == bytes_digest(bytes_of(big)));
    CHECK(file_digest(InputFile(folder.write("empty", ""))) == bytes_digest({}));
}

TEST_CASE("names are resolved beside the file that mentions them") {
    CHECK(resolved_beside("/sites/a/site.yaml", "camera.yaml") == "/sites/a/camera.yaml");
    CHECK(resolved_beside("site.yaml", "camera.yaml") == "./camera.yaml");
    CHECK(resolved_beside("a/site.yaml", "/etc/camera.yaml") == "/etc/camera.yaml");
    CHECK(resolved_beside("a/site.yaml", "../camera.yaml") == "a/../camera.yaml");
}

TEST_CASE("folders are made with their parents, and a file in the way is an error") {
    const TemporaryFolder folder;
    make_folder(folder.file("a/b/c"));
    CHECK(std::filesystem::is_directory(folder.file("a/b/c")));
    make_folder(folder.file("a/b/c"));
    folder.write("file", "");
    CHECK_THROWS_AS(make_folder(folder.file("file/d")), SystemError);
}

TEST_CASE("a result in a folder that does not exist is an error of the system") {
    const TemporaryFolder folder;
    CHECK_THROWS_AS(OutputFile(folder.file("missing/result")), SystemError);
}

TEST_CASE("What a dead writer left behind is removed; what is being written stays") {
    const test::TemporaryFolder folder;
    const std::string left = folder.write(".mask.fits.4194305-0.partial", "half a file");
    folder.write("mask.fits", "whole");
    folder.write(".hidden", "not ours");
    io::OutputFile in_the_making(folder.file("other.fits"));
    io::remove_left_behind(folder.file(""));
    CHECK_FALSE(std::filesystem::exists(left));
    CHECK(std::filesystem::exists(folder.file("mask.fits")));
    CHECK(std::filesystem::exists(folder.file(".hidden")));
    CHECK(std::filesystem::exists(in_the_making.temporary_path()));
    in_the_making.commit();
    CHECK(std::filesystem::exists(folder.file("other.fits")));
}

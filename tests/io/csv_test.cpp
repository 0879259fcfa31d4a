#include "io/csv.h"

#include <catch2/catch.hpp>
#include <fmt/format.h>

#include "core/error.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::TemporaryFolder;

namespace {

std::string message_of(const std::string& path) {
    try {
        CsvReader table(path);
        while (table.next()) {
            for (std::size_t i = 0; i < table.columns().size(); ++i) {
                (void)table.number(static_cast<int>(i));
            }
        }
    } catch (const InputError& error) {
        return error.what();
    }
    return "";
}

}  // namespace

TEST_CASE("fields are read by name, with quotes, blanks and either line end") {
    const TemporaryFolder folder;
    // RFC 4180: a quoted field may hold commas and doubled quotes; lines may end in CRLF.
    CsvReader table(folder.write(
        "a.csv", "# a remark\r\nname, mag ,note\r\n\"x, \"\"y\"\"\", 1.5 ,\r\n\r\nz,-2e3,last"));
    REQUIRE(table.columns() == std::vector<std::string>{"name", "mag", "note"});
    REQUIRE(table.next());
    CHECK(table.field(table.required_column("name")) == "x, \"y\"");
    CHECK(table.number(table.required_column("mag")) == 1.5);
    CHECK(table.field(2).empty());
    CHECK(table.line() == 3);
    REQUIRE(table.next());
    CHECK(table.number(1) == -2000.0);
    CHECK(table.field(2) == "last");
    CHECK_FALSE(table.next());
    CHECK_FALSE(table.column("colour").has_value());
}

TEST_CASE("a number that is none is refused with its line and column") {
    const TemporaryFolder folder;
    for (const char* text : {"x", "1.5x", "", "nan", "inf", "1e999", "0x10", "1 2"}) {
        INFO("field '" << text << "'");
        const std::string path = folder.write("a.csv", std::string("m,k\n1,2\n3,") + text + "\n");
        CHECK_THAT(message_of(path), Catch::Contains("line 3, column 'k'") &&
                                         Catch::Contains(path) &&
                                         Catch::Contains("a finite number"));
    }
    CsvReader table(folder.write("b.csv", "n\n1.5\n"));
    REQUIRE(table.next());
    CHECK_THROWS_AS(table.integer(0), InputError);
}

TEST_CASE("a file that is not a table is refused, saying why") {
    const TemporaryFolder folder;
    CHECK_THAT(message_of(folder.write("a.csv", "")), Catch::Contains("no header row"));
    CHECK_THAT(message_of(folder.write("b.csv", "\n# only a remark\n")),
               Catch::Contains("no header row"));
    CHECK_THAT(message_of(folder.write("c.csv", "a,b,a\n")), Catch::Contains("'a' twice"));
    CHECK_THAT(message_of(folder.write("d.csv", "a,b\n1,2\n1,2,3\n")),
               Catch::Contains("line 3: found 3 fields; expected 2"));
    CHECK_THAT(message_of(folder.write("e.csv", "a,b\n1,\"2\n")), Catch::Contains("not closed"));
    CHECK_THAT(message_of(folder.file("missing.csv")), Catch::Contains("No such file"));
    const std::string long_line(70000, '1');
    CHECK_THAT(message_of(folder.write("f.csv", "a\n" + long_line + "\n")),
               Catch::Contains("line 2") && Catch::Contains("64 KiB"));
    CsvReader table(folder.write("g.csv", "a,b\n"));
    try {
        (void)table.required_column("c");
        FAIL("no error");
    } catch (const InputError& error) {
        CHECK_THAT(error.what(), Catch::Contains("a, b") && Catch::Contains("a column 'c'"));
    }
}

TEST_CASE("a byte of value zero does not hide the rest of a line") {
    const TemporaryFolder folder;
    const std::string row("1,2\0,3\n", 7);
    CHECK_THAT(message_of(folder.write("a.csv", "a,b\n" + row)),
               Catch::Contains("line 2: found a byte of value zero"));
}

TEST_CASE("lines may cross the blocks in which a file is read, and a byte order mark is skipped") {
    const TemporaryFolder folder;
    std::string text = "\xEF\xBB\xBFname,value\n";
    for (int i = 0; i < 30000; ++i) {
        text += fmt::format("row{},{}\n", i, i);
    }
    CsvReader table(folder.write("a.csv", text));
    REQUIRE(table.column("name") == 0);
    for (int i = 0; i < 30000; ++i) {
        REQUIRE(table.next());
        REQUIRE(table.field(0) == fmt::format("row{}", i));
        REQUIRE(table.integer(1) == i);
    }
    CHECK_FALSE(table.next());
}

#include "io/star_import.h"

#include <catch2/catch.hpp>
#include <filesystem>
#include <fstream>
#include <limits>

#include "core/error.h"
#include "io/star_file.h"
#include "outside.h"
#include "star_list_support.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::test;

namespace {

constexpr double kAll = std::numeric_limits<double>::infinity();

/// The message with which an import of this text is refused; nothing is written then.
std::string refusal(const std::string& text, const io::StarImportSettings& settings = {}) {
    const TemporaryFolder folder;
    const std::string source = folder.write("stars.txt", text);
    try {
        import_stars(source, folder.file("list.fits"), settings);
    } catch (const std::exception& error) {
        CHECK(folder.entries() == 1);
        return error.what();
    }
    return "no error";
}

std::string votable(const std::string& fields, const std::string& data,
                    const std::string& prologue = "") {
    return "<?xml version=\"1.0\"?>\n" + prologue + "<VOTABLE version=\"1.4\"><RESOURCE><TABLE>" +
           fields + "<DATA>" + data + "</DATA></TABLE></RESOURCE></VOTABLE>\n";
}

const std::string kFields = R"(<FIELD name="id" datatype="char" arraysize="*"/>)"
                            R"(<FIELD name="ra" datatype="double" unit="deg"/>)"
                            R"(<FIELD name="dec" datatype="double" unit="deg"/>)"
                            R"(<FIELD name="mag" datatype="float"><VALUES null="-99"/></FIELD>)";

}  // namespace

TEST_CASE("FITS, VOTable in its three forms and CSV give the same list, byte for byte") {
    const TemporaryFolder folder;
    std::string csv = "id,ra,dec,epoch,pmra,pmdec,mag_r\n";
    int i = 0;
    for (const RowOfStar& star : random_stars(3000, 11)) {
        csv +=
            fmt::format("{},{},{},{},{},{},{}\n", star.id, star.position.ra_deg,
                        star.position.dec_deg, 2016.0, 0.25 * (i % 37), -0.5 * (i % 11), star.mag);
        ++i;
    }
    const std::string source = folder.write("stars.csv", csv);
    const CommandResult written = run_script(
        "astropy_star_tables.py", "write " + quoted(source) + " " + quoted(folder.file("")));
    INFO(written.output);
    REQUIRE(written.status == 0);
    const auto digest = [&folder](const std::string& name) {
        import_stars(folder.file(name), folder.file("list.fits"));
        return io::file_digest(io::InputFile(folder.file("list.fits")));
    };
    const std::string expected = digest("stars.csv");
    CHECK(digest("stars.fits") == expected);
    CHECK(digest("stars.tabledata.vot") == expected);
    CHECK(digest("stars.binary.vot") == expected);
    CHECK(digest("stars.binary2.vot") == expected);
    // Whole numbers as names, beyond what a double holds.
    const std::string numbers = digest("numbers.csv");
    CHECK(contents(folder.file("list.fits")).find("4000000000000000007") != std::string::npos);
    CHECK(digest("numbers.fits") == numbers);
    CHECK(digest("numbers.binary.vot") == numbers);
}

TEST_CASE("astropy and the standard verifier read the list without complaint") {
    const TemporaryFolder folder;
    std::string csv = "id,ra,dec,epoch,pmra,pmdec,mag_r\n";
    for (const RowOfStar& star : random_stars(500, 12)) {
        csv += fmt::format("{},{},{},2000,1.5,-2.5,{}\n", star.id, star.position.ra_deg,
                           star.position.dec_deg, star.mag);
    }
    const std::string source = folder.write("stars.csv", csv);
    import_stars(source, folder.file("list.fits"));
    const CommandResult verified = verify(folder.file("list.fits"));
    CHECK_THAT(verified.output, Catch::Contains(kNoFault));
    const CommandResult checked =
        run_script("astropy_star_tables.py",
                   "check " + quoted(folder.file("list.fits")) + " " + quoted(source));
    INFO(checked.output);
    CHECK(checked.status == 0);
}

TEST_CASE("Columns may have other names") {
    const TemporaryFolder folder;
    io::StarImportSettings settings;
    settings.columns = {{"id", "source"}, {"ra", "RAJ2000"}, {"mag_r", "rmag"}, {"epoch", "when"}};
    import_stars(folder.write("s.csv", "source,RAJ2000,Dec,rmag,when\nx,10,20,7.5,2016\n"),
                 folder.file("l.fits"), settings);
    const auto star =
        io::open_star_list(folder.file("l.fits"))->within({10.0, 20.0}, 0.1, "r", kAll).at(0);
    CHECK(star.id == "x");
    CHECK(star.mag == 7.5);
    CHECK(star.epoch == 2016.0);
    settings.columns["pmra"] = "absent";
    CHECK_THAT(refusal("source,RAJ2000,Dec,rmag,when\nx,10,20,7.5,2016\n", settings),
               Catch::Contains("a column 'absent'") && Catch::Contains("--column pmra=NAME"));
    settings.columns = {{"colour", "x"}};
    CHECK_THAT(refusal("id,ra,dec,mag\nx,10,20,7.5\n", settings),
               Catch::Contains("--column colour"));
}

TEST_CASE("A wrong row is named with its line, its column and what was expected") {
    const std::string good = "id,ra,dec,mag,epoch,pmra\na,10,20,5,2000,1\n";
    const auto refused = [&good](const std::string& row, const std::string& place,
                                 const std::string& expected) {
        const std::string message = refusal(good + row + "\n");
        CHECK_THAT(message, Catch::Contains("line 3") && Catch::Contains(place) &&
                                Catch::Contains(expected));
    };
    refused("b,360.5,20,5,2000,1", "'ra'", "found 360.5; expected 0 to 360 deg");
    refused("b,-0.1,20,5,2000,1", "'ra'", "0 to 360");
    refused("b,10,90.01,5,2000,1", "'dec'", "-90 to 90 deg");
    refused("b,nan,20,5,2000,1", "'ra'", "found no value");
    refused("b,,20,5,2000,1", "'ra'", "found no value");
    refused("b,inf,20,5,2000,1", "'ra'", "0 to 360");
    refused("b,10h,20,5,2000,1", "'ra'", "a number");
    refused("b,10,20,inf,2000,1", "'mag'", "-30 to 40 mag");
    refused("b,10,20,5,J2000,1", "'epoch'", "a number");
    refused("b,10,20,5,51544,1", "'epoch'", "1800 to 2200 yr");
    refused("b,10,20,5,2000,1e5", "'pmra'", "-15000 to 15000 mas/yr");
    refused(",10,20,5,2000,1", "'id'", "1 to 64 printable");
    refused(std::string(65, 'x') + ",10,20,5,2000,1", "'id'", "1 to 64 printable");
    refused("\xc3\xa9,10,20,5,2000,1", "'id'", "1 to 64 printable");
    refused("b,10,20", "", "6 as in the header row");
}

TEST_CASE("Tables without the columns, or without rows, are refused") {
    CHECK_THAT(refusal("id,ra,mag\na,10,5\n"),
               Catch::Contains("found id, ra, mag; expected a column 'dec'"));
    CHECK_THAT(refusal("id,ra,dec\na,10,5\n"), Catch::Contains("a column 'mag'"));
    CHECK_THAT(refusal("id,ra,dec,mag\n"), Catch::Contains("no stars"));
    CHECK_THAT(refusal(""), Catch::Contains("no header row"));
    CHECK_THAT(refusal("\x1f\x8b compressed"), Catch::Contains("a compressed file"));
}

TEST_CASE("Right ascension 360 is 0") {
    const TemporaryFolder folder;
    import_stars(folder.write("s.csv", "id,ra,dec,mag\na,360,0,5\n"), folder.file("l.fits"));
    CHECK(io::open_star_list(folder.file("l.fits"))
              ->within({0.0, 0.0}, 0.1, "", kAll)
              .at(0)
              .position.ra_deg == 0.0);
}

TEST_CASE("Units that are not ours are refused") {
    std::string fields = kFields;
    fields.replace(fields.find("unit=\"deg\""), 10, "unit=\"hourangle\"");
    CHECK_THAT(refusal(votable(fields, "<TABLEDATA/>")), Catch::Contains("column 'ra'") &&
                                                             Catch::Contains("unit 'hourangle'") &&
                                                             Catch::Contains("expected deg"));
    CHECK_THAT(refusal(votable(kFields + R"(<FIELD name="pmra" datatype="float" unit="deg/yr"/>)",
                               "<TABLEDATA/>")),
               Catch::Contains("unit 'deg/yr'"));
}

TEST_CASE("Nulls of a VOTable are no values") {
    const TemporaryFolder folder;
    const std::string rows =
        "<TABLEDATA><TR><TD>a</TD><TD> 10 </TD><TD>+20</TD><TD>-99</TD></TR>"
        "<TR><TD>b &amp; c</TD><TD>10.01</TD><TD>2e1</TD><TD>NaN</TD></TR></TABLEDATA>";
    import_stars(folder.write("s.vot", votable(kFields, rows)), folder.file("l.fits"));
    const auto found =
        io::open_star_list(folder.file("l.fits"))->within({10.0, 20.0}, 0.1, "", kAll);
    REQUIRE(found.size() == 2);
    CHECK(std::isnan(found[0].mag));
    CHECK(std::isnan(found[1].mag));
    CHECK(found[1].id == "b & c");
}

TEST_CASE("The flags of a BINARY2 row say which cells are null") {
    // Two rows by Python's struct and base64 modules: flags 0x10 (the fourth field is null), "a",
    // 10.0, 20.0, 5.0; flags 0, "b", 10.01, 20.0, 6.0.
    const TemporaryFolder folder;
    const std::string stream =
        "EAAAAAFhQCQAAAAAAABANAAAAAAAAECgAAAAAAAAAWJAJAUeuFHrhUA0AAAAAAAAQMAAAA==";
    import_stars(folder.write("s.vot", votable(kFields, "<BINARY2><STREAM encoding=\"base64\">" +
                                                            stream + "</STREAM></BINARY2>")),
                 folder.file("l.fits"));
    const auto found =
        io::open_star_list(folder.file("l.fits"))->within({10.0, 20.0}, 0.1, "", kAll);
    REQUIRE(found.size() == 2);
    CHECK(found[0].id == "b");
    CHECK(found[0].mag == 6.0);
    CHECK(found[1].id == "a");
    CHECK(std::isnan(found[1].mag));
}

TEST_CASE("VOTables that are damaged or dangerous are refused at once") {
    const std::string row = "<TR><TD>a</TD><TD>10</TD><TD>20</TD><TD>5</TD></TR>";
    CHECK_THAT(refusal(votable(kFields, "<TABLEDATA><TR><TD>a</TD></TR></TABLEDATA>")),
               Catch::Contains("1 cells in row 1"));
    CHECK_THAT(refusal(votable(kFields, "<TABLEDATA>" + row + "<TR><TD>")),
               Catch::Contains("well-formed XML"));
    CHECK_THAT(refusal("<VOTABLE></VOTABLE>"), Catch::Contains("no TABLEDATA"));
    CHECK_THAT(
        refusal(votable(kFields, "<BINARY><STREAM encoding=\"base64\">AAAA*</STREAM></BINARY>")),
        Catch::Contains("not base64"));
    CHECK_THAT(
        refusal(votable(kFields, "<BINARY><STREAM encoding=\"base64\">AAAAAWEA</STREAM></BINARY>")),
        Catch::Contains("complete rows"));
    // A cell that claims two thousand million characters.
    CHECK_THAT(refusal(votable(kFields,
                               "<BINARY2><STREAM encoding=\"base64\">AH////8A</STREAM></BINARY2>")),
               Catch::Contains("a damaged row 1"));
    CHECK_THAT(refusal(votable(kFields, "<BINARY><STREAM href=\"x\"/></BINARY>")),
               Catch::Contains("kept elsewhere"));
    CHECK_THAT(refusal(votable(kFields, "<FITS/>")), Catch::Contains("FITS stream"));
    CHECK_THAT(refusal(votable(R"(<FIELD name="x" datatype="quad"/>)", "<BINARY/>")),
               Catch::Contains("unknown datatype"));
    const std::string bomb =
        "<!DOCTYPE VOTABLE [<!ENTITY a \"ha\"><!ENTITY b \"&a;&a;&a;&a;&a;&a;&a;&a;\">]>\n";
    CHECK_THAT(refusal(votable(kFields, "<TABLEDATA>&b;</TABLEDATA>", bomb)),
               Catch::Contains("an entity declaration"));
    std::string deep;
    for (int i = 0; i < 100; ++i) {
        deep += "<RESOURCE>";
    }
    CHECK_THAT(refusal("<VOTABLE>" + deep), Catch::Contains("nested deeper"));
    CHECK_THAT(refusal(votable(kFields, "<TABLEDATA><TR><TD>" + std::string(70000, 'x'))),
               Catch::Contains("64 KiB"));
}

TEST_CASE("A FITS file without a table, cut short or with arrays for numbers is refused") {
    const TemporaryFolder folder;
    const auto refused = [&folder](const std::string& path) {
        try {
            import_stars(path, folder.file("l.fits"));
        } catch (const InputError& error) {
            return std::string(error.what());
        }
        return std::string("no error");
    };
    const std::string source =
        folder.write("s.csv", "id,ra,dec,epoch,pmra,pmdec,mag_r\na,10,20,2000,1,1,5\n");
    REQUIRE(run_script("astropy_star_tables.py",
                       "write " + quoted(source) + " " + quoted(folder.file("")))
                .status == 0);
    const std::string good = contents(folder.file("stars.fits"));
    CHECK_THAT(refused(folder.write("p.fits", good.substr(0, 2880))), Catch::Contains("no table"));
    CHECK(refused(folder.write("c.fits", good.substr(0, good.size() - 2880))) != "no error");
    CHECK_THAT(
        refused(folder.write("u.fits", with(good, "TUNIT2  = 'deg     '", "TUNIT2  = 'h       '"))),
        Catch::Contains("column 'ra'") && Catch::Contains("unit 'h'"));
    // The name is only a name: brackets and filters in it mean nothing.
    const std::string odd = folder.write("stars [STARS][1:2].fits", good);
    CHECK(refused(odd) == "no error");
}

TEST_CASE("Mutilated star tables are read or refused, and never crash") {
    const TemporaryFolder folder;
    std::string csv = "id,ra,dec,epoch,pmra,pmdec,mag_r\n";
    for (const RowOfStar& star : random_stars(30, 13)) {
        csv += fmt::format("{},{},{},2000,1.5,-2.5,{}\n", star.id, star.position.ra_deg,
                           star.position.dec_deg, star.mag);
    }
    const std::string source = folder.write("stars.csv", csv);
    REQUIRE(run_script("astropy_star_tables.py",
                       "write " + quoted(source) + " " + quoted(folder.file("")))
                .status == 0);
    std::mt19937 random(14);
    int read = 0;
    int refused = 0;
    const std::string list = folder.file("list.fits");
    for (const char* name : {"stars.csv", "stars.fits", "stars.tabledata.vot", "stars.binary.vot",
                             "stars.binary2.vot"}) {
        const std::string good = contents(folder.file(name));
        for (int trial = 0; trial < 150; ++trial) {
            std::string bad = good;
            for (int i = 0; i < 4; ++i) {
                bad[random() % bad.size()] = static_cast<char>(random() % 256);
            }
            const std::string path = folder.write("bad", bad);
            std::filesystem::remove(list);
            try {
                import_stars(path, list);
                ++read;
                CHECK_NOTHROW(io::verify_star_list(list));
            } catch (const InputError&) {
                ++refused;
                CHECK_FALSE(std::filesystem::exists(list));
            }
        }
    }
    // A changed digit of a magnitude is a star list still; a changed comma is none.
    CHECK(read > 0);
    CHECK(refused > 0);
}

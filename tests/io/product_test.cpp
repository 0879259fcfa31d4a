#include <bit>
#include <catch2/catch.hpp>
#include <cmath>
#include <filesystem>
#include <fmt/format.h>
#include <fstream>
#include <limits>
#include <sstream>

#include "core/error.h"
#include "io/fits_writer.h"
#include "io/mask_fixture.h"
#include "io/outside.h"
#include "io/product_file.h"

namespace straymark {
namespace {

using Reals = std::vector<double>;
using Wholes = std::vector<std::int64_t>;
using Texts = std::vector<std::string>;

Product small_product() {
    Product product;
    product.kind = "crosstalk";
    product.camera = "petrel";
    product.mode = "fast";
    product.version = "7";
    product.valid_from.days = 60000.1;
    product.valid_to.days = 61000.0;
    ProductTable pairs;
    pairs.rows = 2;
    pairs.columns["victim"] = Texts{"d1/a01", "d1/a02"};
    pairs.columns["source"] = Texts{"d1/a02", "d1/a01 and more"};
    pairs.columns["coefficient"] = Reals{1.0 / 3.0, -5e-324};
    pairs.columns["error"] = Reals{std::numeric_limits<double>::quiet_NaN(), 1e308};
    pairs.columns["pixels"] = Wholes{std::numeric_limits<std::int64_t>::min(), 12};
    pairs.columns["anything"] = Reals{1.0, 2.0};
    product.tables["PAIRS"] = pairs;
    ProductTable priors;
    priors.columns["stratum"] = Texts{};
    priors.columns["mean"] = Reals{};
    product.tables["PRIORS"] = priors;
    return product;
}

std::string read_bytes(const std::string& path) {
    std::ifstream file(path, std::ios::binary);
    std::ostringstream bytes;
    bytes << file.rdbuf();
    return bytes.str();
}

void write_bytes(const std::string& path, const std::string& bytes) {
    std::ofstream(path, std::ios::binary) << bytes;
}

template <typename T>
const T& column(const Product& product, const std::string& table, const std::string& name) {
    return std::get<T>(product.tables.at(table).columns.at(name));
}

/// A file whose sums are right but whose content is not what it should be.
void write_crafted(const std::string& path, const io::HeaderCards& primary,
                   std::vector<io::FitsUnit> units) {
    io::write_fits(path, primary, units);
}

io::HeaderCards good_primary() {
    io::HeaderCards cards;
    cards.add_text("FORMAT", "straymark-crosstalk/1");
    cards.add_text("CAMERA", "petrel");
    return cards;
}

bool message_has(const std::string& path, const std::string& part) {
    try {
        static_cast<void>(io::read_product(path));
    } catch (const InputError& error) {
        INFO(error.what());
        CHECK(error.fault().file == path);
        return std::string(error.what()).find(part) != std::string::npos;
    }
    return false;
}

}  // namespace

TEST_CASE("A product comes back as it was written, bit for bit") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("p.fits");
    const Product written = small_product();
    io::write_product(path, written);
    const Product read = io::read_product(path);
    CHECK(read.kind == "crosstalk");
    CHECK(read.camera == "petrel");
    CHECK(read.mode == "fast");
    CHECK(read.filter.empty());
    CHECK(read.version == "7");
    CHECK(read.valid_from.days == 60000.1);
    CHECK(read.valid_to.days == 61000.0);
    CHECK(read.path == path);
    CHECK(read.digest.size() == std::string("xxh128:").size() + 32);
    REQUIRE(read.tables.size() == 2);
    CHECK(read.tables.at("PAIRS").rows == 2);
    CHECK(read.tables.at("PRIORS").rows == 0);
    CHECK(column<Texts>(read, "PAIRS", "source") == Texts{"d1/a02", "d1/a01 and more"});
    CHECK(column<Wholes>(read, "PAIRS", "pixels") ==
          Wholes{std::numeric_limits<std::int64_t>::min(), 12});
    CHECK(column<Reals>(read, "PAIRS", "coefficient") == Reals{1.0 / 3.0, -5e-324});
    CHECK(std::isnan(column<Reals>(read, "PAIRS", "error")[0]));
    CHECK(column<Reals>(read, "PAIRS", "error")[1] == 1e308);
    const test::CommandResult verdict = test::verify(path);
    INFO(verdict.output);
    CHECK(verdict.output.find(test::kNoFault) != std::string::npos);
}

TEST_CASE("A product that another program wrote is read by value") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("theirs.fits");
    const test::CommandResult written = test::run_script("astropy_product.py", test::quoted(path));
    INFO(written.output);
    REQUIRE(written.status == 0);
    // Expected values: those that the script states.
    const Product read = io::read_product(path);
    CHECK(read.mode == "fast");
    CHECK(read.valid_from.days == 60000.25);
    CHECK(read.valid_to.days > 1e8);
    CHECK(column<Texts>(read, "PAIRS", "victim") == Texts{"d1/a01", "d1/a02", "d2/a16"});
    CHECK(column<Reals>(read, "PAIRS", "coefficient")[1] == -7e-5);
    CHECK(std::isnan(column<Reals>(read, "PAIRS", "coefficient")[2]));
    CHECK(column<Reals>(read, "PAIRS", "error") == Reals{0.5, 0.25, 0.125});
    CHECK(column<Wholes>(read, "PAIRS", "pixels") == Wholes{1, -2, 2147483647});
    CHECK(column<Reals>(read, "PAIRS", "exposures") == Reals{0, 40000, 65535});
    CHECK(column<Wholes>(read, "PAIRS", "byte") == Wholes{0, 128, 255});
    CHECK(column<Wholes>(read, "PAIRS", "wide") ==
          Wholes{0, -(std::int64_t{1} << 62), std::int64_t{1} << 62});
    CHECK(column<Reals>(read, "PAIRS", "scaled") == Reals{10.5, 11.0, 12.0});
    CHECK(column<Reals>(read, "PAIRS", "nullable")[0] == 7.0);
    CHECK(std::isnan(column<Reals>(read, "PAIRS", "nullable")[1]));
    CHECK(column<Wholes>(read, "PAIRS", "flag") == Wholes{1, 0, 1});
    CHECK(read.tables.at("PAIRS").columns.count("covariance") == 0);
}

TEST_CASE("One changed byte anywhere in a product is noticed") {
    // The ones'-complement sum of every unit changes with any single byte (FITS 4.0 appendix J).
    const test::ScratchFolder folder;
    const std::string path = folder.file("p.fits");
    io::write_product(path, small_product());
    const std::string whole = read_bytes(path);
    std::size_t noticed = 0;
    std::size_t tried = 0;
    for (std::size_t at = 0; at < whole.size(); at += 7, ++tried) {
        std::string damaged = whole;
        damaged[at] = static_cast<char>(damaged[at] ^ 0x15);
        write_bytes(path, damaged);
        try {
            static_cast<void>(io::read_product(path));
            FAIL_CHECK("byte " << at);
        } catch (const InputError&) {
            ++noticed;
        }
    }
    CHECK(tried > 1000);
    CHECK(noticed == tried);
}

TEST_CASE("A product cut short is refused") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("p.fits");
    io::write_product(path, small_product());
    const std::string whole = read_bytes(path);
    // Cutting whole units away leaves a file that FITS has no quarrel with; then a table lacks.
    for (std::size_t size = 0; size < whole.size(); size += 2880 - 80) {
        if (size % 2880 == 0 && size > 0) {
            continue;
        }
        write_bytes(path, whole.substr(0, size));
        CHECK_THROWS_AS(io::read_product(path), InputError);
    }
}

TEST_CASE("What is wrong with a product is said") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("p.fits");
    const auto table = [](const std::string& name) {
        return io::table_unit(name, {{"x", "", std::vector<double>{1.0}}});
    };
    SECTION("newer than the program") {
        io::HeaderCards cards;
        cards.add_text("FORMAT", "straymark-crosstalk/2");
        cards.add_text("CAMERA", "petrel");
        write_crafted(path, cards, {});
        CHECK(message_has(path, "a product newer than the program"));
    }
    SECTION("no format, or another one") {
        write_crafted(path, {}, {});
        CHECK(message_has(path, "FORMAT"));
        for (const char* text : {"straymark-/1", "straymark-crosstalk", "straymark-crosstalk/0",
                                 "straymark-crosstalk/-1", "straymark-crosstalk/1x", "other/1"}) {
            io::HeaderCards cards;
            cards.add_text("FORMAT", text);
            write_crafted(path, cards, {});
            CHECK(message_has(path, "straymark-KIND/VERSION"));
        }
    }
    SECTION("no camera") {
        io::HeaderCards cards;
        cards.add_text("FORMAT", "straymark-crosstalk/1");
        write_crafted(path, cards, {});
        CHECK(message_has(path, "CAMERA"));
    }
    SECTION("dates the wrong way round, or no dates") {
        io::HeaderCards cards = good_primary();
        cards.add_real("MJDFROM", 60001.0);
        cards.add_real("MJDTO", 60000.0);
        write_crafted(path, cards, {});
        CHECK(message_has(path, "a first date before the second"));
        io::HeaderCards words = good_primary();
        words.add_text("MJDFROM", "yesterday");
        write_crafted(path, words, {});
        CHECK(message_has(path, "MJDFROM"));
    }
    SECTION("one table twice") {
        write_crafted(path, good_primary(), {table("PAIRS"), table("pairs")});
        CHECK(message_has(path, "a second table of this name"));
    }
    SECTION("one column twice") {
        write_crafted(path, good_primary(),
                      {io::table_unit("PAIRS", {{"x", "", std::vector<double>{1.0}},
                                                {"X", "", std::vector<double>{1.0}}})});
        CHECK(message_has(path, "TTYPE2"));
    }
    SECTION("a string that is no text") {
        io::HeaderCards cards = io::binary_table_cards(2, 1, 0, 1);
        cards.add_text("TTYPE1", "victim");
        cards.add_text("TFORM1", "2A");
        cards.add_text("EXTNAME", "PAIRS");
        write_crafted(path, good_primary(),
                      {io::finished_unit(cards, {std::byte{'a'}, std::byte{7}})});
        CHECK(message_has(path, "printable ASCII"));
    }
    SECTION("a billion rows of nothing") {
        io::HeaderCards cards = io::binary_table_cards(0, 2'000'000'000, 0, 1);
        cards.add_text("TTYPE1", "victim");
        cards.add_text("TFORM1", "0A");
        cards.add_text("EXTNAME", "PAIRS");
        write_crafted(path, good_primary(), {io::finished_unit(cards, {})});
        CHECK(message_has(path, "NAXIS2"));
    }
    SECTION("columns that do not fill the row") {
        io::HeaderCards cards = io::binary_table_cards(9, 1, 0, 1);
        cards.add_text("TTYPE1", "coefficient");
        cards.add_text("TFORM1", "1D");
        cards.add_text("EXTNAME", "PAIRS");
        write_crafted(path, good_primary(), {io::finished_unit(cards, std::vector<std::byte>(9))});
        CHECK(message_has(path, "NAXIS1"));
    }
    SECTION("formats that do not exist, or overflow") {
        for (const char* format : {"", "Z", "1", "-1D", "99999999999999999999D", "2147483647M"}) {
            io::HeaderCards cards = io::binary_table_cards(8, 1, 0, 1);
            cards.add_text("TTYPE1", "coefficient");
            cards.add_text("TFORM1", format);
            write_crafted(path, good_primary(),
                          {io::finished_unit(cards, std::vector<std::byte>(8))});
            CHECK_THROWS_AS(io::read_product(path), InputError);
        }
    }
    SECTION("text that is no file of ours") {
        write_bytes(path, "format: straymark-crosstalk/1\n");
        CHECK(message_has(path, "straymark-KIND/VERSION"));
        write_bytes(path, R"({"format": "straymark-ghost/1"})");
        CHECK(message_has(path, "ghost"));
        write_bytes(path, std::string(100000, '['));
        CHECK_THROWS_AS(io::read_product(path), InputError);
    }
}

TEST_CASE("Files that kill careless readers are refused as products") {
    // tests/fault/hostile/SOURCE.md tells what each of them does.
    std::size_t refused = 0;
    for (const auto& entry : std::filesystem::directory_iterator(
             std::filesystem::path(STRAYMARK_TEST_DATA) / "fault" / "hostile")) {
        INFO(entry.path().string());
        CHECK_THROWS_AS(io::read_product(entry.path().string()), InputError);
        ++refused;
    }
    CHECK(refused >= 7);
}

TEST_CASE("The format of a product is told without reading the rest") {
    const test::ScratchFolder folder;
    io::write_product(folder.file("p.fits"), small_product());
    CHECK(io::product_format(folder.file("p.fits")).kind == "crosstalk");
    CHECK(io::product_format(folder.file("p.fits")).version == 1);
    write_bytes(folder.file("g.json"), R"({"x_note": 1, "format": "straymark-ghost/3"})");
    CHECK(io::product_format(folder.file("g.json")).kind == "ghost");
    CHECK(io::product_format(folder.file("g.json")).version == 3);
    CHECK_THROWS_AS(io::product_format(folder.file("missing.fits")), InputError);
}

}  // namespace straymark

#include "io/fits_writer.h"

#include <array>
#include <bit>
#include <catch2/catch.hpp>
#include <cmath>
#include <filesystem>
#include <fitsio.h>
#include <fmt/format.h>
#include <fstream>
#include <limits>
#include <random>

#include "core/error.h"
#include "io/mask_fixture.h"

namespace straymark {
namespace {

/// A file opened by CFITSIO, the outside reader of these tests.
class OutsideFile {
public:
    explicit OutsideFile(const std::string& path) {
        fits_open_diskfile(&file_, path.c_str(), READONLY, &status_);
        REQUIRE(status_ == 0);
    }
    ~OutsideFile() {
        int ignored = 0;
        fits_close_file(file_, &ignored);
    }
    OutsideFile(const OutsideFile&) = delete;
    OutsideFile& operator=(const OutsideFile&) = delete;

    [[nodiscard]] std::string text(const std::string& keyword) {
        char* value = nullptr;
        fits_read_key_longstr(file_, keyword.c_str(), &value, nullptr, &status_);
        CHECK(status_ == 0);
        std::string text = value == nullptr ? "" : value;
        fits_free_memory(value, &status_);
        return text;
    }
    [[nodiscard]] double real(const std::string& keyword) {
        double value = 0.0;
        fits_read_key(file_, TDOUBLE, keyword.c_str(), &value, nullptr, &status_);
        CHECK(status_ == 0);
        return value;
    }
    void move_to(const char* table) {
        std::string name = table;
        fits_movnam_hdu(file_, BINARY_TBL, name.data(), 0, &status_);
        REQUIRE(status_ == 0);
    }
    template <typename T>
    [[nodiscard]] std::vector<T> column(int type, int number, std::size_t rows) {
        std::vector<T> values(rows);
        fits_read_col(file_, type, number, 1, 1, static_cast<LONGLONG>(rows), nullptr,
                      values.data(), nullptr, &status_);
        CHECK(status_ == 0);
        return values;
    }
    [[nodiscard]] fitsfile* get() { return file_; }

private:
    fitsfile* file_ = nullptr;
    int status_ = 0;
};

std::string only_card(const io::HeaderCards& cards) {
    CHECK(cards.text().size() == 80);
    return cards.text().substr(0, cards.text().find_last_not_of(' ') + 1);
}

}  // namespace

TEST_CASE("Cards have the fixed format of the standard") {
    // FITS 4.0 section 4.2: keyword in columns 1 to 8, "= ", logicals in column 30, numbers flush
    // right to column 30, strings from column 11 with at least eight characters.
    const auto card = [](auto add) {
        io::HeaderCards cards;
        add(cards);
        return only_card(cards);
    };
    CHECK(card([](auto& c) { c.add_logical("SIMPLE", true); }) == "SIMPLE  =                    T");
    CHECK(card([](auto& c) { c.add_integer("NAXIS", -12, "axes"); }) ==
          "NAXIS   =                  -12 / axes");
    CHECK(card([](auto& c) { c.add_real("CRVAL1", 150.0); }) == "CRVAL1  =                150.0");
    CHECK(card([](auto& c) { c.add_real("CD1_1", -1e-20, "d"); }) ==
          "CD1_1   =               -1E-20 / d");
    CHECK(card([](auto& c) { c.add_text("OBJECT", "O'HARA", "who"); }) ==
          "OBJECT  = 'O''HARA '           / who");
    CHECK(card([](auto& c) { c.add_text("EMPTY", ""); }) == "EMPTY   = '        '");
}

TEST_CASE("Text of any length comes back whole through CONTINUE cards") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("text.fits");
    std::vector<std::string> texts;
    io::HeaderCards cards;
    for (std::size_t length = 0; length < 210; ++length) {
        // Quotes, which take two columns, and ampersands wander over the ends of the cards.
        std::string text;
        for (std::size_t i = 0; i < length; ++i) {
            text += i % 5 == length % 5 ? '\'' : (i % 7 == 0 ? '&' : 'x');
        }
        cards.add_text(fmt::format("T{}", length), text, length % 2 == 0 ? "comment" : "");
        texts.push_back(text);
    }
    io::write_fits(path, cards, {});
    OutsideFile file(path);
    for (std::size_t length = 0; length < texts.size(); ++length) {
        CHECK(file.text(fmt::format("T{}", length)) == texts[length]);
    }
}

TEST_CASE("Reals in headers read back as the same number") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("reals.fits");
    std::mt19937_64 random(3);
    std::vector<double> numbers = {0.0,
                                   -0.0,
                                   std::numeric_limits<double>::max(),
                                   std::numeric_limits<double>::min(),
                                   0.1,
                                   60000.123456789,
                                   1e21,
                                   123456789.0};
    while (numbers.size() < 500) {
        const auto number = std::bit_cast<double>(random());
        if (std::isnormal(number)) {  // CFITSIO refuses the others
            numbers.push_back(number);
        }
    }
    io::HeaderCards cards;
    for (std::size_t i = 0; i < numbers.size(); ++i) {
        cards.add_real(fmt::format("R{}", i), numbers[i]);
    }
    io::write_fits(path, cards, {});
    OutsideFile file(path);
    for (std::size_t i = 0; i < numbers.size(); ++i) {
        CHECK(file.real(fmt::format("R{}", i)) == numbers[i]);
    }
}

TEST_CASE("Escaped text is printable, keeps no blank at its end, and is restored") {
    std::mt19937 random(4);
    for (int i = 0; i < 2000; ++i) {
        std::string text(random() % 12, ' ');
        for (char& c : text) {
            constexpr std::string_view kAwkward = " %20AF";
            c = random() % 2 == 0 ? kAwkward[random() % kAwkward.size()]
                                  : static_cast<char>(random() % 256);
        }
        const std::string escaped = io::escaped_text(text);
        CHECK(io::printable_text(escaped) == escaped);
        CHECK((escaped.empty() || escaped.back() != ' '));
        CHECK(io::restored_text(escaped) == text);
    }
    CHECK(io::printable_text("100% d\xC3\xA9j\xC3\xA0\n") == "100% d%C3%A9j%C3%A0%0A");
    CHECK(io::restored_text("%zz%4") == "%zz%4");
}

TEST_CASE("Cards made elsewhere cannot break the header they go into") {
    io::HeaderCards cards;
    cards.add_integer("CRPIX1", 5);
    CHECK(cards.add_card("CRPIX2  = 7"));
    CHECK(cards.text().size() == 160);
    for (const char* structure :
         {"END", "NAXIS1  = 1", "NAXIS   = 9", "XTENSION= 'IMAGE'", "TFORM3  = 'D'", "ZIMAGE  = F",
          "CHECKSUM= ''", "PCOUNT  = 2", "BSCALE  = 2.0", "CRPIX1  = 6", "CONTINUE  'x'"}) {
        CHECK_FALSE(cards.add_card(structure));
    }
    CHECK(cards.text().size() == 160);
    CHECK(cards.add_card("COMMENT one"));
    CHECK(cards.add_card("COMMENT two"));
    CHECK_THROWS_AS(cards.add_card("CTYPE1  = 'a\nEND"), InputError);
    CHECK_THROWS_AS(cards.add_card(std::string(81, 'x')), InputError);
}

TEST_CASE("Every kind of column is read by CFITSIO as written") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("table.fits");
    const std::vector<std::int16_t> shorts = {-32768, 0, 32767};
    const std::vector<std::int32_t> ints = {std::numeric_limits<std::int32_t>::min(), 1, 2};
    const std::vector<std::int64_t> longs = {std::numeric_limits<std::int64_t>::min(), 1,
                                             std::numeric_limits<std::int64_t>::max()};
    const std::vector<float> floats = {0.1F, -0.0F, std::numeric_limits<float>::infinity()};
    const std::vector<double> doubles = {1.0 / 3.0, 5e-324, -1e308};
    const std::array units = {
        io::table_unit("SEVEN", {{"shorts", "", shorts},
                                 {"bools", "", std::vector<bool>{true, false, true}},
                                 {"ints", "adu", ints},
                                 {"texts", "", std::vector<std::string>{"", "b c", "long one"}},
                                 {"longs", "", longs},
                                 {"floats", "", floats},
                                 {"doubles", "pixel", doubles}}),
        io::table_unit("NONE", {{"texts", "", std::vector<std::string>{}}})};
    io::write_fits(path, {}, units);
    OutsideFile file(path);
    file.move_to("SEVEN");
    CHECK(file.column<std::int16_t>(TSHORT, 1, 3) == shorts);
    CHECK(file.column<char>(TLOGICAL, 2, 3) == std::vector<char>{1, 0, 1});
    CHECK(file.column<std::int32_t>(TINT, 3, 3) == ints);
    CHECK(file.column<std::int64_t>(TLONGLONG, 5, 3) == longs);
    CHECK(file.column<float>(TFLOAT, 6, 3) == floats);
    CHECK(file.column<double>(TDOUBLE, 7, 3) == doubles);
    std::array<std::array<char, 9>, 3> texts{};
    std::array<char*, 3> pointers = {texts[0].data(), texts[1].data(), texts[2].data()};
    int status = 0;
    fits_read_col(file.get(), TSTRING, 4, 1, 1, 3, nullptr, pointers.data(), nullptr, &status);
    CHECK(status == 0);
    CHECK(std::string(texts[0].data()).find_first_not_of(' ') == std::string::npos);
    CHECK(std::string(texts[1].data()) == "b c");
    CHECK(std::string(texts[2].data()) == "long one");
    file.move_to("NONE");
    LONGLONG rows = -1;
    fits_get_num_rowsll(file.get(), &rows, &status);
    CHECK(rows == 0);
}

TEST_CASE("Sums agree with those of CFITSIO for any data") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("sums.fits");
    std::mt19937 random(6);
    for (int i = 0; i < 40; ++i) {
        // All bits set makes the most carries.
        std::vector<std::int32_t> values(random() % 3000 + 1, -1);
        for (std::int32_t& value : values) {
            value = i % 4 == 0 ? -1 : static_cast<std::int32_t>(random());
        }
        const std::array units = {io::table_unit("X", {{"values", "", values}})};
        io::write_fits(path, {}, units);
        OutsideFile file(path);
        file.move_to("X");
        int data = 0;
        int header = 0;
        int status = 0;
        fits_verify_chksum(file.get(), &data, &header, &status);
        CHECK(data == 1);
        CHECK(header == 1);
    }
}

TEST_CASE("A whole file is told from a cut or changed one by its first header") {
    const test::ScratchFolder folder;
    const std::string path = folder.file("whole.fits");
    const std::array units = {io::table_unit("X", {{"v", "", std::vector<double>{1.0}}})};
    io::HeaderCards cards;
    cards.add_text("NAME", "n");
    io::write_fits(path, cards, units);
    const auto header = io::whole_primary_header(io::InputFile(path));
    REQUIRE(header.has_value());
    CHECK(header->find("NAME")->text == "n");
    std::filesystem::resize_file(path, std::filesystem::file_size(path) - 1);
    CHECK_FALSE(io::whole_primary_header(io::InputFile(path)).has_value());
    std::ofstream(path) << "no FITS";
    CHECK_FALSE(io::whole_primary_header(io::InputFile(path)).has_value());
}

}  // namespace straymark

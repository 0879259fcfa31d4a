#include "io/fits_cards.h"

#include <catch2/catch.hpp>
#include <fmt/format.h>
#include <string>

using namespace straymark::io;

namespace {

std::string card(const std::string& text) {
    return fmt::format("{:<80}", text);
}

}  // namespace

// Expected values: FITS 4.0, section 4.2 (values of cards) and 4.2.1.2 (CONTINUE).

TEST_CASE("A string value ends at its closing quote, and two quotes stand for one") {
    const auto value = card_value(card("OBSERVER= 'O''HARA  '           / who's at the desk"));
    REQUIRE(value);
    CHECK(value->text == "O'HARA");
    CHECK(value->quoted);
    CHECK(value->closed);
}

TEST_CASE("Leading blanks of a string count, trailing ones do not") {
    CHECK(card_value(card("KEY     = '  ab  '"))->text == "  ab");
    CHECK(card_value(card("KEY     = ''"))->text.empty());
}

TEST_CASE("A string without its closing quote is flagged") {
    const auto value = card_value(card("CTYPE2  = 'DEC--TAN-SIPT       / TAN projection"));
    REQUIRE(value);
    CHECK_FALSE(value->closed);
}

TEST_CASE("Numbers and logicals are read to the comment") {
    CHECK(card_value(card("NAXIS1  =                 2048 / columns"))->integer() == 2048);
    CHECK(card_value(card("A       = +7"))->integer() == 7);
    CHECK(card_value(card("A       = -1.5D3 / double"))->number() == -1500.0);
    CHECK(card_value(card("A       = 2.5e-1"))->number() == 0.25);
    CHECK(card_value(card("A       =                    T"))->logical() == true);
    CHECK(card_value(card("A       =                    F"))->logical() == false);
    CHECK(card_value(card("EXPTIME = '30.5    '"))->number() == 30.5);
}

TEST_CASE("Text that is no finite number gives none") {
    for (const char* text : {"NaN", "inf", "-Infinity", "1.5.2", "0x10", "", "12 13", "1e999"}) {
        CHECK_FALSE(CardValue{text}.number());
    }
    for (const char* text : {"1.5", "99999999999999999999", "+", "1e3"}) {
        CHECK_FALSE(CardValue{text}.integer());
    }
}

TEST_CASE("Commentary and empty values have no value") {
    CHECK_FALSE(card_value(card("COMMENT = this only looks like a value").substr(0, 8)));
    CHECK_FALSE(card_value(card("COMMENT no value here")));
    CHECK_FALSE(card_value(card("BLANKVAL=                      / undefined")));
    CHECK_FALSE(card_value(card("")));
}

TEST_CASE("A header finds the first card of a keyword, whatever its case") {
    const FitsHeader header(card("GAIN    = 1.5") + card("GAIN    = 2.5") + card("END"));
    CHECK(header.size() == 2);
    CHECK(header.find("gain")->number() == 1.5);
    CHECK_FALSE(header.find("GAI"));
    CHECK_FALSE(header.find("GAINS"));
}

TEST_CASE("Nothing behind END is part of a header") {
    const FitsHeader header(card("A       = 1") + card("END") + card("B       = 2"));
    CHECK(header.size() == 1);
    CHECK_FALSE(header.find("B"));
}

TEST_CASE("A long string goes on over CONTINUE cards") {
    const FitsHeader header(card("SVALUE  = 'This is a long string value &'") +
                            card("CONTINUE  'extending&   '") +
                            card("CONTINUE  ' over 3 lines.' / comment") + card("END"));
    CHECK(header.find("SVALUE")->text == "This is a long string value extending over 3 lines.");
}

TEST_CASE("A string that ends with an ampersand keeps it where nothing continues it") {
    const FitsHeader header(card("A       = 'black &'") + card("B       = 'white'"));
    CHECK(header.find("A")->text == "black &");
}

TEST_CASE("Long keywords are found among HIERARCH cards") {
    const FitsHeader header(card("HIERARCH time_recorded = '2012-11-24T03:38:38'") +
                            card("HIERARCH TEL ALT START = 42.5 / degrees"));
    CHECK(header.find("time_recorded")->text == "2012-11-24T03:38:38");
    CHECK(header.find("HIERARCH TEL ALT START")->number() == 42.5);
    CHECK(header.find("TEL ALT START")->number() == 42.5);
    CHECK_FALSE(header.find("TEL"));
}

TEST_CASE("Text from a file cannot steer a terminal") {
    CHECK(printable("a\x1b[2Jb\xff") == "a?[2Jb?");
    CHECK(printable(std::string(100, 'x')) == std::string(80, 'x') + "...");
}

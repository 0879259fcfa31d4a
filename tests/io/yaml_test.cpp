#include "io/yaml.h"

#include <catch2/catch.hpp>
#include <fmt/format.h>
#include <limits>

#include "core/error.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::TemporaryFolder;

namespace {

constexpr NumberRange kAny{-1e9, 1e9};

/// The value under `v` of a small text.
template <class Read>
auto read(const std::string& value, Read&& use) {
    const YamlFile file("a.yaml", fmt::format("v: {}\n", value));
    return use(file.root().mapping({"v"}).required("v"));
}

double number(const std::string& value, const NumberRange& range = kAny) {
    return read(value, [&](const YamlValue& v) { return v.number(range); });
}

template <class Action>
std::string message_of(Action&& action) {
    try {
        action();
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}

std::string parse_message(const std::string& text) {
    return message_of([&] { const YamlFile file("a.yaml", text); });
}

}  // namespace

TEST_CASE("numbers are read as written in decimal") {
    CHECK(number("12") == 12.0);
    CHECK(number("-1.5") == -1.5);
    CHECK(number("+2.5e-3") == 0.0025);
    CHECK(number("0") == 0.0);
    CHECK(number("0.10") == 0.1);
    CHECK(number(".5") == 0.5);
    CHECK(number("5.") == 5.0);
    CHECK(number("1e5") == 1e5);
}

TEST_CASE("what YAML readers disagree on, or what is no number, is refused as a number") {
    // YAML 1.1 reads 010 as 8 and 1_000 as 1000, YAML 1.2 reads neither so.
    for (const char* text :
         {"010",  "-010", "00.5",   "0x10",   "0o10",  "1_000",  ".nan",  ".inf", "-.inf",
          "nan",  "inf",  "1e999",  "\"12\"", "'1.5'", "twelve", "12 mm", "12mm", "1,5",
          "1:30", "[1]",  "{a: 1}", "yes",    "true",  "~",      "--1",   "1e",   "."}) {
        INFO(text);
        CHECK_THROWS_AS(number(text), InputError);
    }
    CHECK_THAT(message_of([] { number("010"); }), Catch::Contains("leading zeros"));
    CHECK_THAT(message_of([] { number("\"12\""); }), Catch::Contains("without quotes"));
}

TEST_CASE("a number outside its range names the range, and the unit it may be in") {
    const NumberRange focal_length{50.0, 1e6, "mm"};
    CHECK_THAT(message_of([&] { number("8.28", focal_length); }),
               Catch::Contains("line 1, column 4, v") && Catch::Contains("found 8.28") &&
                   Catch::Contains("at least 50 and at most 1000000 mm") &&
                   Catch::Contains("is it in metres? Then write 8280"));
    CHECK_THAT(message_of([] {
                   number("6220", {100.0, 3000.0, "nm"});
               }),
               Catch::Contains("angstroms? Then write 622"));
    CHECK_THAT(message_of([] {
                   number("0.015", {0.5, 500.0, "um"});
               }),
               Catch::Contains("millimetres? Then write 15"));
    CHECK_THAT(message_of([] { number("0", {0.0, 1.0, "s", true}); }), Catch::Contains("above 0"));
    CHECK(number("0", {0.0, 1.0, "s"}) == 0.0);
    CHECK(number("1", {0.0, 1.0, "s"}) == 1.0);
    CHECK_THROWS_AS(number("1.0000001", {0.0, 1.0, "s"}), InputError);
}

TEST_CASE("whole numbers have no fractional part and lie within their bounds") {
    const auto integer = [](const std::string& text) {
        return read(text, [](const YamlValue& v) { return v.integer(-2, 10); });
    };
    CHECK(integer("10") == 10);
    CHECK(integer("-2") == -2);
    CHECK(integer("3.0") == 3);
    for (const char* text : {"1.5", "11", "-3", "1e99", "010", "x"}) {
        CHECK_THROWS_AS(integer(text), InputError);
    }
}

TEST_CASE("truth is true or false and nothing else") {
    const auto boolean = [](const std::string& text) {
        return read(text, [](const YamlValue& v) { return v.boolean(); });
    };
    CHECK(boolean("true"));
    CHECK_FALSE(boolean("False"));
    for (const char* text : {"yes", "no", "on", "off", "y", "1", "0", "\"true\"", "tRUE", "~"}) {
        INFO(text);
        CHECK_THROWS_AS(boolean(text), InputError);
    }
}

TEST_CASE("a text that YAML could read as something else needs quotes") {
    const auto text = [](const std::string& value) {
        return read(value, [](const YamlValue& v) { return v.text(); });
    };
    CHECK(text("OBJECT") == "OBJECT");
    CHECK(text("\"010\"") == "010");
    CHECK(text("'true'") == "true");
    CHECK(text("\"\\u00e9\"") == "\xc3\xa9");
    CHECK(text("MJD-OBS") == "MJD-OBS");
    CHECK(text("1x2") == "1x2");
    for (const char* value : {"10", "010", "1.5", "1e5", ".nan", "0x1f", "true", "null", "~",
                              "\"\"", "[a]", "{a: b}", "\"a\\tb\"", "\"a\\nb\"", "\"a\\0b\""}) {
        INFO(value);
        CHECK_THROWS_AS(text(value), InputError);
    }
    CHECK_THAT(message_of([&] { text("010"); }), Catch::Contains("put it in quotes: \"010\""));
    CHECK_THROWS_AS(text(std::string(2000, 'x')), InputError);
}

TEST_CASE("a wrong word is met with the one that was meant") {
    const auto mount = [](const std::string& word) {
        return read(word, [](const YamlValue& v) {
            return v.choice<int>({{"altaz", 1}, {"equatorial", 2}});
        });
    };
    CHECK(mount("equatorial") == 2);
    CHECK_THAT(message_of([&] { mount("equitorial"); }),
               Catch::Contains("one of: altaz, equatorial") &&
                   Catch::Contains("did you mean 'equatorial'?"));
    CHECK_THAT(message_of([&] { mount("dobson"); }), !Catch::Contains("did you mean"));
}

TEST_CASE("an unknown key is refused where it stands, with the nearest known one") {
    const std::string text = "name: a\nx_note: [anything, {at: all}]\nfocal_lenght_mm: 3\n";
    const YamlFile file("a.yaml", text);
    const std::string message = message_of([&] {
        (void)file.root().mapping({"name", "focal_length_mm", "aperture_mm"});
    });
    CHECK_THAT(message, Catch::Contains("a.yaml: line 3, column 1") &&
                            Catch::Contains("unknown key 'focal_lenght_mm'") &&
                            Catch::Contains("did you mean 'focal_length_mm'?"));
    CHECK_NOTHROW(file.root().mapping({"name", "focal_lenght_mm"}));
}

TEST_CASE("the nearest word is near, or there is none") {
    const std::vector<std::string_view> words{"crosstalk", "ghost", "spike", "focal_length_mm"};
    CHECK(nearest_word("corsstalk", words) == "crosstalk");
    CHECK(nearest_word("spikes", words) == "spike");
    CHECK(nearest_word("focal_length", words) == "focal_length_mm");
    CHECK(nearest_word("halo", words).empty());
    CHECK(nearest_word("", words).empty());
    CHECK(nearest_word(std::string(100000, 'x'), words).empty());
}

TEST_CASE("duplicate keys are refused with both places") {
    CHECK_THAT(parse_message("a: 1\nb:\n  c: 1\n  d: 2\n  c: 3\n"),
               Catch::Contains("line 5, column 3") && Catch::Contains("'c' a second time") &&
                   Catch::Contains("first is at line 3"));
    CHECK_THAT(parse_message("{x_a: 1, 'x_a': 2}"), Catch::Contains("a second time"));
    CHECK_THAT(parse_message("a: {b: 1}\nc: {b: 1}\n"), Catch::Equals("no error"));
}

TEST_CASE("anchors, aliases and tags are refused, so that nothing can multiply") {
    // The classic bomb: ten levels of ten aliases.
    std::string bomb = "a0: &a0 [x, x, x, x, x, x, x, x, x, x]\n";
    for (int i = 1; i < 10; ++i) {
        bomb += fmt::format("a{0}: &a{0} [", i);
        for (int k = 0; k < 10; ++k) {
            bomb += fmt::format("*a{}, ", i - 1);
        }
        bomb += "]\n";
    }
    CHECK_THAT(parse_message(bomb), Catch::Contains("an anchor (&a0)"));
    CHECK_THAT(parse_message("a: *b\n"), !Catch::Equals("no error"));
    CHECK_THAT(parse_message("a: !!python/object:os.system x\n"), Catch::Contains("a tag"));
    CHECK_THAT(parse_message("a: !local {b: 1}\n"), Catch::Contains("a tag"));
    CHECK_THAT(parse_message("<<: {a: 1}\n"), Catch::Equals("no error"));  // then an unknown key
}

TEST_CASE("deep nesting ends in an error, not in a full stack") {
    for (const std::size_t depth : {40U, 600U, 16000U}) {
        CHECK_THAT(parse_message(std::string(depth, '[')), !Catch::Equals("no error"));
        std::string nested;
        for (std::size_t i = 0; i < depth; ++i) {
            nested += "{a: ";
        }
        CHECK_THAT(parse_message(nested), !Catch::Equals("no error"));
    }
    CHECK_THAT(parse_message(std::string(40, '[') + std::string(40, ']')),
               Catch::Contains("nested deeper than 32"));
    CHECK_THAT(parse_message(std::string(32, '[') + std::string(32, ']')),
               Catch::Equals("no error"));
}

TEST_CASE("a file that is no YAML mapping of one document is refused") {
    CHECK_THAT(parse_message(""), Catch::Contains("an empty file"));
    CHECK_THAT(parse_message("# only a remark\n"), Catch::Contains("an empty file"));
    CHECK_THAT(parse_message("a: 1\n---\nb: 2\n"), Catch::Contains("more than one YAML document"));
    CHECK_THAT(parse_message("a: [1, 2\n"), Catch::Contains("line"));
    CHECK_THAT(parse_message("a: 1\n b: 2\n"), Catch::Contains("line 2"));
    CHECK_THAT(parse_message("\ta: 1\n"), Catch::Contains("line 1"));
    CHECK_THAT(parse_message("? [a, b]\n: 1\n"), Catch::Contains("as a key"));
    CHECK_THAT(parse_message("~: 1\n"), Catch::Contains("an empty key"));
}

TEST_CASE("bytes that are no text are refused before the parser sees them") {
    CHECK_THAT(parse_message("a: 1\nb: \x04 2\n"), Catch::Contains("line 2: found a control byte"));
    CHECK_THAT(parse_message(std::string("a: 1\0", 5)), Catch::Contains("control byte"));
    CHECK_THAT(parse_message("a: \xff\xfe\n"), Catch::Contains("not UTF-8"));
    CHECK_THAT(parse_message("a: \xc3"), Catch::Contains("not UTF-8"));
    CHECK_THAT(parse_message("a: \xc3(\n"), Catch::Contains("not UTF-8"));
    CHECK_THAT(parse_message("a: \xc3\xa9\r\nb: 2\r\n"), Catch::Equals("no error"));
}

TEST_CASE("too large a file, or one with too many values, is refused") {
    const TemporaryFolder folder;
    const std::string path = folder.write("big.yaml", std::string(1100000, '#'));
    CHECK_THAT(message_of([&] { const YamlFile file(path); }), Catch::Contains("1100000 bytes"));
    std::string many = "[";
    for (int i = 0; i < 200001; ++i) {
        many += i % 1000 == 999 ? "a,\n" : "a,";
    }
    CHECK_THAT(parse_message(many + "]"), Catch::Contains("over 200000 values"));
    std::string keys;
    for (int i = 0; i < 10001; ++i) {
        keys += fmt::format("k{}: 1\n", i);
    }
    CHECK_THAT(parse_message(keys), Catch::Contains("over 10000 keys"));
}

TEST_CASE("a line that would keep the parser busy for minutes is refused at once") {
    CHECK_THAT(parse_message("a: 1\n" + std::string(65537, '!')),
               Catch::Contains("line 2: found a line of 65537 bytes"));
    CHECK_THAT(parse_message("# " + std::string(65534, '-') + "\na: 1\n"),
               Catch::Equals("no error"));
}

TEST_CASE("a missing key names the mapping that lacks it, an empty one itself") {
    const YamlFile file("a.yaml", "telescope:\n  mount: altaz\n  aperture_mm:\n");
    const YamlMapping telescope = file.root()
                                      .mapping({"telescope"})
                                      .required("telescope")
                                      .mapping({"mount", "aperture_mm", "focal_length_mm"});
    CHECK_THAT(message_of([&] { (void)telescope.required("focal_length_mm"); }),
               Catch::Contains("line 2, column 3, telescope") &&
                   Catch::Contains("a key 'focal_length_mm'"));
    CHECK_THAT(message_of([&] { (void)telescope.optional("aperture_mm"); }),
               Catch::Contains("telescope.aperture_mm") && Catch::Contains("found nothing"));
}

TEST_CASE("lists have the promised length") {
    const auto count = [](const std::string& text) {
        return read(text, [](const YamlValue& v) { return v.items(2, 3).size(); });
    };
    CHECK(count("[1, 2]") == 2);
    CHECK_THAT(message_of([&] { count("[1]"); }), Catch::Contains("found a list of 1"));
    CHECK_THAT(message_of([&] { count("[1, 2, 3, 4]"); }), Catch::Contains("a list of 2 to 3"));
    CHECK_THAT(message_of([&] { count("{a: 1}"); }), Catch::Contains("found a mapping"));
}

TEST_CASE("the format line tells a newer file from another kind of file") {
    const auto message = [](const std::string& text) {
        return message_of([&] { YamlFile("a.yaml", text).require_format("straymark-camera", 1); });
    };
    CHECK(message("format: straymark-camera/1\n") == "no error");
    CHECK_THAT(message("format: straymark-camera/2\n"), Catch::Contains("update the program"));
    CHECK_THAT(message("format: straymark-camera/0\n"), Catch::Contains("expected format"));
    CHECK_THAT(message("format: straymark-camera/1x\n"), Catch::Contains("expected format"));
    CHECK_THAT(message("format: straymark-site/1\n"), Catch::Contains("the right file?"));
    CHECK_THAT(message("name: a\n"), Catch::Contains("no key 'format'"));
    CHECK_THAT(message("[1, 2]\n"), Catch::Contains("no key 'format'"));
    CHECK_THAT(message("format: [1]\n"), Catch::Contains("expected format"));
}

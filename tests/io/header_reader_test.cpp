#include "io/header_reader.h"

#include <catch2/catch.hpp>
#include <cmath>

#include "core/error.h"
#include "io/header_time.h"
#include "io/raw_support.h"

using namespace straymark;
using namespace straymark::io;
using namespace straymark::test;

namespace {

using Cards = std::vector<std::string>;

// MJD in a double near 6e4 is spaced by 7e-12 day; a few operations lie between header and result.
constexpr double kMjdRounding = 5e-11;
constexpr double kAngleRounding = 1e-12;

/// Equal within an absolute tolerance; Catch's own default is relative, 0.7 day at MJD 60000.
Approx approx(double expected, double tolerance) {
    return Approx(expected).margin(tolerance).epsilon(0);
}

FitsHeader header_of(const Cards& cards) {
    std::string all;
    for (const std::string& one : cards) {
        all += one;
    }
    return FitsHeader(all);
}

/// The standard cards, with `changed` in place of those of the same keyword.
Cards with(const Cards& changed) {
    Cards cards = exposure_cards();
    for (const std::string& one : changed) {
        std::erase_if(cards,
                      [&](const std::string& old) { return old.substr(0, 8) == one.substr(0, 8); });
        cards.push_back(one);
    }
    return cards;
}
Cards without(const std::string& keyword) {
    Cards cards = exposure_cards();
    std::erase_if(cards, [&](const std::string& one) {
        return one.starts_with(fmt::format("{:<8}=", keyword));
    });
    return cards;
}

ExposureHeader read(const Camera& camera, const Cards& primary, const Cards& extension = {}) {
    return read_exposure_header(
        camera, "raw.fits",
        {{"HDU 0 (primary)", header_of(primary)}, {"HDU 1 (d1_a01)", header_of(extension)}});
}
std::string fault_of(const Camera& camera, const Cards& primary, const Cards& extension = {}) {
    try {
        read(camera, primary, extension);
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}
bool mentions(const std::string& text, const std::string& part) {
    return text.find(part) != std::string::npos;
}
bool noted(const ExposureHeader& header, const std::string& part) {
    for (const std::string& note : header.notes) {
        if (mentions(note, part)) {
            return true;
        }
    }
    return false;
}

}  // namespace

TEST_CASE("An exposure's header is read by the camera's keywords") {
    Camera camera = small_camera();
    camera.headers.sequence = "RUNSEQ";
    camera.headers.end = "MJD-END";
    camera.headers.clear = "MJD-CLR";
    camera.headers.readout_end = "MJD-RD";
    camera.headers.temperature = "CCDTEMP";
    camera.headers.mode = "SPEED";
    camera.focal_plane.camera_angle = {"CAMANG", -1, 90.0};
    const ExposureHeader header =
        read(camera,
             with({text_card("RUNSEQ", "7"), card("MJD-END", "60310.2504"),
                   card("MJD-CLR", "60310.2499"), card("MJD-RD", "60310.2507"),
                   card("CCDTEMP", "-110.5"), text_card("SPEED", "slow"), card("CAMANG", "30")}));
    CHECK(header.id == "n1-001");
    CHECK(header.sequence == "7");
    CHECK(header.type == ExposureType::sky);
    CHECK(header.type_value == "object");
    CHECK(header.start.days == 60310.25);
    CHECK(header.end.days == 60310.2504);
    CHECK(header.clear.days == 60310.2499);
    CHECK(header.readout_end.days == 60310.2507);
    CHECK(header.exposure_s == 30.0);
    CHECK(header.filter == "r");
    CHECK(header.boresight.ra_deg == 150.5);
    CHECK(header.boresight.dec_deg == -30.25);
    CHECK(header.psi_deg == 60.0);  // psi = sign * value + zero
    CHECK(header.temperature == -110.5);
    CHECK(header.mode == "slow");
    CHECK(header.notes.empty());
}

TEST_CASE("Keywords are sought in the primary header, then in the detector's HDUs") {
    const Camera camera = small_camera();
    CHECK(read(camera, without("FILTER"), {text_card("FILTER", "r")}).filter == "r");
    // The exposure's own header speaks first.
    CHECK(read(camera, with({}), {text_card("OBS_ID", "other")}).id == "n1-001");
}

TEST_CASE("Times that headers do not give are sums, and stated") {
    const Camera camera = small_camera();
    const ExposureHeader header = read(camera, with({}));
    CHECK(header.clear.days == 60310.25);
    CHECK(header.end.days == approx(60310.25 + 30.0 / 86400, kMjdRounding));
    CHECK(header.readout_end.days == approx(60310.25 + 50.0 / 86400, kMjdRounding));
    CHECK(noted(header, "end: start + exposure"));
    CHECK(noted(header, "clear: start of the exposure"));
    CHECK(noted(header, "readout_end: end + 20 s"));
    Camera named = small_camera();
    named.headers.end = "MJD-END";
    CHECK(noted(read(named, with({})), "end: start + exposure (no MJD-END)"));
}

TEST_CASE("A start is MJD, or a date and time") {
    // 2024-01-01 is MJD 60310 (Astronomical Almanac: JD 2460310.5).
    const Camera camera = small_camera();
    const auto start = [&](const std::string& text) {
        return read(camera, with({text_card("MJD-OBS", text)})).start.days;
    };
    CHECK(start("2024-01-01T06:00:00") == approx(60310.25, kMjdRounding));
    CHECK(start("2024-01-01 06:00:00.864") == approx(60310.25 + 1e-5, kMjdRounding));
    CHECK(start("2024-01-01T06:00:00Z") == approx(60310.25, kMjdRounding));
    CHECK(start("60310.25") == 60310.25);
}

TEST_CASE("A date alone is no start; with a time of day from another keyword it is") {
    Camera camera = small_camera();
    camera.headers.start = {"DATE-OBS", {}};
    const Cards cards = with({text_card("DATE-OBS", "2013-07-13"), text_card("UT", "00:57:33")});
    const std::string fault = fault_of(camera, cards);
    CHECK(mentions(fault, "a date without a time"));
    CHECK(mentions(fault, "keyword DATE-OBS"));
    camera.headers.start = {"DATE-OBS", "UT"};
    // 2013-07-13 is MJD 56486; 57 min 33 s are 3453 s.
    CHECK(read(camera, cards).start.days == approx(56486.0 + 3453.0 / 86400, kMjdRounding));
    CHECK(mentions(fault_of(camera, with({text_card("DATE-OBS", "2013-07-13")})), "keyword UT"));
    CHECK(mentions(
        fault_of(camera, with({text_card("DATE-OBS", "2013-07-13"), text_card("UT", "noon")})),
        "'noon'"));
}

TEST_CASE("Instants that cannot be are refused with what stands there") {
    const Camera camera = small_camera();
    for (const char* text : {"2024-02-30T00:00:00", "2024-13-01T00:00:00", "2024-01-01T24:00:01",
                             "2024-01-01T10:60:00", "13/07/24", "1900-01-01T00:00:00", "NaN", "0",
                             "yesterday", "2024-01-01T10:00", "-60310.25"}) {
        INFO(text);
        CHECK(mentions(fault_of(camera, with({text_card("MJD-OBS", text)})),
                       fmt::format("'{}'", text)));
    }
    CHECK(mentions(fault_of(camera, with({card("MJD-OBS", "2460310.75")})), "Julian date"));
}

TEST_CASE("The time system is honoured") {
    // TAI - UTC = 37 s since 2017-01-01 (IERS Bulletin C 52); TT - TAI = 32.184 s.
    const Camera camera = small_camera();
    const auto start = [&](const char* system) {
        return read(camera, with({text_card("TIMESYS", system)})).start.days;
    };
    CHECK(start("UTC") == 60310.25);
    CHECK(start("TAI") == approx(60310.25 - 37.0 / 86400, kMjdRounding));
    CHECK(start("TT(TAI)") == approx(60310.25 - 69.184 / 86400, kMjdRounding));
    const std::string fault = fault_of(camera, with({text_card("TIMESYS", "TDB")}));
    CHECK(mentions(fault, "keyword TIMESYS"));
    CHECK(mentions(fault, "'TDB'"));
    // Date-times too.
    CHECK(read(camera,
               with({text_card("TIMESYS", "TAI"), text_card("MJD-OBS", "2024-01-01T06:00:37")}))
              .start.days == approx(60310.25, kMjdRounding));
}

TEST_CASE("A pointing is degrees or sexagesimal, right ascension then in hours") {
    const Camera camera = small_camera();
    const auto boresight = [&](const std::string& ra, const std::string& dec) {
        return read(camera, with({text_card("RA", ra), text_card("DEC", dec)})).boresight;
    };
    // The real frame of tests/reference/real_frames gives its pointing both ways, the sexagesimal
    // one rounded to a second of time and of arc.
    constexpr double kHalfSecondOfTimeDeg = 0.5 * 15.0 / 3600;
    constexpr double kHalfSecondOfArcDeg = 0.5 / 3600;
    const SkyPoint real = boresight(" 22:04:08", "-00:55:31");
    CHECK(real.ra_deg == approx(331.0334, kHalfSecondOfTimeDeg));
    CHECK(real.dec_deg == approx(-0.9253, kHalfSecondOfArcDeg));
    CHECK(boresight("06 58 38.5", "+55 57 00").ra_deg ==
          approx(15.0 * (6 + 58 / 60.0 + 38.5 / 3600), kAngleRounding));
    CHECK(boresight("6h58m38.5s", "-55d57m30s").dec_deg ==
          approx(-(55 + 57.5 / 60), kAngleRounding));
    CHECK(boresight("360", "90").ra_deg == 0.0);
}

TEST_CASE("A pointing that is none is refused") {
    const Camera camera = small_camera();
    for (const char* ra :
         {"NaN", "-1", "361", "25:00:00", "12:60:00", "12", "1:2:3:4", "abc", "12:-3:00", "1::2"}) {
        INFO(ra);
        const std::string fault = fault_of(camera, with({text_card("RA", ra)}));
        if (std::string(ra) == "12") {
            CHECK(fault == "no error");  // degrees
        } else {
            CHECK(mentions(fault, "keyword RA"));
        }
    }
    for (const char* dec : {"NaN", "91", "-90:00:01", "+"}) {
        INFO(dec);
        CHECK(mentions(fault_of(camera, with({text_card("DEC", dec)})), "keyword DEC"));
    }
}

TEST_CASE("What is indispensable is named when it is missing") {
    const Camera camera = small_camera();
    for (const char* keyword : {"OBS_ID", "MJD-OBS", "EXPTIME", "FILTER", "RA", "DEC"}) {
        INFO(keyword);
        const std::string fault = fault_of(camera, without(keyword));
        CHECK(mentions(fault, fmt::format("keyword {}: found no such card", keyword)));
        CHECK(mentions(fault, "raw.fits"));
    }
    CHECK(mentions(fault_of(camera, with({text_card("OBS_ID", "")})), "keyword OBS_ID"));
}

TEST_CASE("An unknown filter is refused with the known ones") {
    const std::string fault = fault_of(small_camera(), with({text_card("FILTER", "z''")}));
    CHECK(mentions(fault, "'z''"));
    CHECK(mentions(fault, "filters: r"));
}

TEST_CASE("A filter may be a number in the header") {
    Camera camera = small_camera();
    camera.filters["48"] = {};
    CHECK(read(camera, with({card("FILTER", "48")})).filter == "48");
}

TEST_CASE("An exposure time must be a number of seconds, zero at least") {
    const Camera camera = small_camera();
    for (const char* seconds : {"-0.1", "NaN", "'long'", "1e9"}) {
        CHECK(mentions(fault_of(camera, with({card("EXPTIME", seconds)})), "keyword EXPTIME"));
    }
    CHECK(read(camera, with({card("EXPTIME", "0")})).exposure_s == 0.0);
}

TEST_CASE("Times out of order are refused") {
    Camera camera = small_camera();
    camera.headers.end = "MJD-END";
    camera.headers.clear = "MJD-CLR";
    camera.headers.readout_end = "MJD-RD";
    CHECK(mentions(fault_of(camera, with({card("MJD-END", "60310.24")})), "keyword MJD-END"));
    CHECK(mentions(fault_of(camera, with({card("MJD-CLR", "60310.26")})), "keyword MJD-CLR"));
    CHECK(mentions(fault_of(camera, with({card("MJD-RD", "60310.25")})), "keyword MJD-RD"));
}

TEST_CASE("The type keyword tells sky from darks, whatever its letters' case") {
    const Camera camera = small_camera();
    CHECK(read(camera, with({text_card("IMAGETYP", "dark")})).type == ExposureType::dark);
    CHECK(read(camera, with({text_card("IMAGETYP", "Object")})).type == ExposureType::sky);
    const ExposureHeader other = read(camera, with({text_card("IMAGETYP", "BIAS")}));
    CHECK(other.type == ExposureType::other);
    CHECK(noted(other, "BIAS"));
    const ExposureHeader unknown = read(camera, without("IMAGETYP"));
    CHECK(unknown.type == ExposureType::sky);
    CHECK(noted(unknown, "no IMAGETYP"));
}

TEST_CASE("A dark needs no filter and no pointing") {
    Cards cards = with({text_card("IMAGETYP", "DARK"), text_card("FILTER", "none")});
    std::erase_if(cards, [](const std::string& one) { return one.starts_with("RA "); });
    const ExposureHeader dark = read(small_camera(), cards);
    CHECK(dark.filter.empty());
    CHECK(std::isnan(dark.boresight.ra_deg));
    CHECK(noted(dark, "filter: not known"));
    CHECK(noted(dark, "pointing: not known"));
}

TEST_CASE("A camera angle that the camera file expects must be there") {
    Camera camera = small_camera();
    camera.focal_plane.camera_angle = {"CAMANG", 1, 0.0};
    CHECK(mentions(fault_of(camera, with({})), "keyword CAMANG"));
    camera.focal_plane.camera_angle = {std::nullopt, 1, 12.5};
    CHECK(read(camera, with({})).psi_deg == 12.5);
}

TEST_CASE("The pier side says whether an equatorial mount is flipped") {
    Camera camera = small_camera();
    camera.headers.pier_side = "PIERSIDE";
    camera.telescope.pier_flipped = "W";
    const Cards west = with({text_card("PIERSIDE", "w")});
    CHECK_FALSE(read(camera, west).pier_flipped);  // altazimuth
    camera.telescope.mount = Mount::equatorial;
    CHECK(read(camera, west).pier_flipped);
    CHECK_FALSE(read(camera, with({text_card("PIERSIDE", "E")})).pier_flipped);
    CHECK(noted(read(camera, with({})), "pier side"));
}

TEST_CASE("An unclosed string is refused, not guessed") {
    const std::string fault =
        fault_of(small_camera(), with({fmt::format("{:<80}", "FILTER  = 'r       / filter")}));
    CHECK(mentions(fault, "keyword FILTER"));
    CHECK(mentions(fault, "ends with a quote"));
}

TEST_CASE("Sexagesimal text keeps the sign of minus zero") {
    CHECK(parse_sexagesimal("-00:30:00") == -0.5);
    CHECK(parse_sexagesimal("+1:30") == 1.5);
    CHECK_FALSE(parse_sexagesimal("--1:30"));
    CHECK_FALSE(parse_sexagesimal("1.5"));
}

#include "sky/wcs.h"

#include <array>
#include <catch2/catch.hpp>
#include <cmath>
#include <fstream>
#include <functional>
#include <random>
#include <sstream>
#include <thread>

#include "core/error.h"
#include "reference_table.h"
#include "sky/projection.h"

using namespace straymark;
using test::number;
using test::ReferenceTable;

namespace {

using Cards = std::vector<std::string>;

Cards cards_of(const std::string& text) {
    Cards out;
    for (std::size_t at = 0; at + 80 <= text.size(); at += 80) {
        out.push_back(text.substr(at, 80));
        if (out.back().starts_with("END     ")) {
            break;
        }
    }
    return out;
}

Cards cards_of_file(const std::string& name) {
    std::ifstream in(std::string(STRAYMARK_TEST_DATA) + "/" + name, std::ios::binary);
    std::ostringstream text;
    text << in.rdbuf();
    REQUIRE_FALSE(text.str().empty());
    return cards_of(text.str());
}

std::string card(const std::string& text) {
    std::string out = text;
    out.resize(80, ' ');
    return out;
}

/// A plain TAN solution: 0.36 arcsec pixels, x to the west, y to the north.
Cards tan_cards() {
    return {card("CTYPE1  = 'RA---TAN'"),    card("CTYPE2  = 'DEC--TAN'"), card("CRVAL1  = 150.0"),
            card("CRVAL2  = 2.0"),           card("CRPIX1  = 1024.5"),     card("CRPIX2  = 1024.5"),
            card("CD1_1   = -1.0D-4"),       card("CD1_2   = 0.0"),        card("CD2_1   = 0.0"),
            card("CD2_2   = 1.0E-4 / [deg]")};
}

Cards with_card(Cards cards, const std::string& text) {
    const std::string keyword = text.substr(0, 8);
    std::erase_if(cards, [&](const std::string& old) { return old.starts_with(keyword); });
    cards.push_back(card(text));
    return cards;
}

std::string message_of(const Cards& cards) {
    try {
        const Wcs wcs(cards, "raw.fits", "HDU 2");
    } catch (const InputError& error) {
        return error.what();
    }
    return "no error";
}

double separation(SkyPoint a, SkyPoint b) {
    return separation_deg(a, b);
}

}  // namespace

TEST_CASE("TPV and SIP solutions give astropy's positions") {
    // Both print 12 decimals; the arithmetic agrees to rounding of the polynomials.
    constexpr double kTolerance_deg = 1e-10;
    const Wcs tpv(cards_of_file("reference/wcs/same_solution_tpv.hdr"), "tpv", "");
    const Wcs sip(cards_of_file("reference/wcs/same_solution_sip.hdr"), "sip", "");
    for (const auto& row : ReferenceTable("wcs/astropy_positions.csv").rows) {
        const Wcs& wcs = row.at("file") == "same_solution_tpv.hdr" ? tpv : sip;
        const SkyPoint expected{number(row, "ra_deg"), number(row, "dec_deg")};
        const DetectorPoint pixel{number(row, "x_px"), number(row, "y_px")};
        CHECK(separation(wcs.sky_from_detector(pixel), expected) < kTolerance_deg);
        const auto back = wcs.detector_from_sky(expected);
        REQUIRE(back);
        // 1e-10 degree at 1 arcsec a pixel, and the inverse's own tolerance.
        CHECK(std::hypot(back->x_px - pixel.x_px, back->y_px - pixel.y_px) < 1e-6);
    }
}

TEST_CASE("One solution written as TPV and as SIP agrees to 1e-8 degree") {
    const Wcs tpv(cards_of_file("reference/wcs/same_solution_tpv.hdr"), "tpv", "");
    const Wcs sip(cards_of_file("reference/wcs/same_solution_sip.hdr"), "sip", "");
    for (double x = -0.5; x <= 2048.0; x += 186.0) {
        for (double y = -0.5; y <= 4096.0; y += 372.0) {
            CHECK(separation(tpv.sky_from_detector({x, y}), sip.sky_from_detector({x, y})) < 1e-8);
        }
    }
}

TEST_CASE("TAN with PV cards is read as TPV") {
    Cards cards = cards_of_file("reference/wcs/same_solution_tpv.hdr");
    const Wcs tpv(cards, "tpv", "");
    cards = with_card(with_card(cards, "CTYPE1  = 'RA---TAN'"), "CTYPE2  = 'DEC--TAN'");
    const Wcs tan(cards, "tan", "");
    const DetectorPoint corner{0.0, 4095.0};
    CHECK(separation(tan.sky_from_detector(corner), tpv.sky_from_detector(corner)) == 0.0);
}

TEST_CASE("A plain TAN solution is the gnomonic projection, with pixels counted from 0") {
    const Wcs wcs(tan_cards(), "raw.fits", "");
    const SkyPoint centre = wcs.sky_from_detector({1023.5, 1023.5});
    CHECK(separation(centre, {150.0, 2.0}) < 1e-12);
    constexpr double kStep = 1e-4 * M_PI / 180.0;
    for (const DetectorPoint pixel : {DetectorPoint{0.0, 0.0}, {2047.0, 100.0}, {-500.0, 3000.0}}) {
        const SkyPoint expected = sky_from_tangent(
            {150.0, 2.0}, {-kStep * (pixel.x_px - 1023.5), kStep * (pixel.y_px - 1023.5)});
        CHECK(separation(wcs.sky_from_detector(pixel), expected) < 1e-12);
        const auto back = wcs.detector_from_sky(expected);
        REQUIRE(back);
        CHECK(back->x_px == Approx(pixel.x_px).margin(1e-7));
        CHECK(back->y_px == Approx(pixel.y_px).margin(1e-7));
    }
    CHECK_FALSE(wcs.detector_from_sky({330.0, -2.0}));
}

TEST_CASE("Declination may be the first axis") {
    Cards cards = with_card(with_card(tan_cards(), "CTYPE1  = 'DEC--TAN'"), "CTYPE2  = 'RA---TAN'");
    cards = with_card(with_card(cards, "CRVAL1  = 2.0"), "CRVAL2  = 150.0");
    const Wcs wcs(cards, "raw.fits", "");
    CHECK(separation(wcs.sky_from_detector({1023.5, 1023.5}), {150.0, 2.0}) < 1e-12);
    CHECK(wcs.sky_from_detector({1033.5, 1023.5}).dec_deg < 2.0);
}

TEST_CASE("A real mosaic header is read; TNX and ZPX are refused by name") {
    CHECK_NOTHROW(
        Wcs(cards_of_file("reference/wcs/mosaic_header_tpv_two_amplifiers.fits"), "m", ""));
    const Cards tnx = cards_of_file("reference/wcs/amplifier_cut_tnx_reversed_section.fits");
    CHECK(Wcs::present(tnx));
    CHECK_THAT(message_of(tnx), Catch::Contains("TNX") && Catch::Contains("raw.fits: HDU 2"));
    const Cards zpx =
        with_card(with_card(tan_cards(), "CTYPE1  = 'RA---ZPX'"), "CTYPE2  = 'DEC--ZPX'");
    CHECK_THAT(message_of(zpx), Catch::Contains("ZPX is not a standard projection"));
}

TEST_CASE("An unclosed quote in any WCS card is an error, not a dead process") {
    const Cards hostile = cards_of_file("fault/hostile/wcspih_unclosed_quote.hdr");
    CHECK(message_of(hostile) != "no error");
    // Its CRPIX1 is damaged too; that put right, the quote is what remains.
    CHECK_THAT(message_of(with_card(hostile, "CRPIX1  = -3925.16")),
               Catch::Contains("a quote that is not closed"));
    for (const char* keyword : {"CTYPE1", "CTYPE2", "CUNIT1", "RADESYS", "RADECSYS"}) {
        std::string text = keyword;
        text.resize(8, ' ');
        CHECK_THAT(message_of(with_card(tan_cards(), text + "= 'ICRS")),
                   Catch::Contains("a quote that is not closed") && Catch::Contains(keyword));
        // A quote that is closed by the comment's own apostrophe.
        CHECK_THAT(message_of(with_card(tan_cards(), text + "= 'ICRS / the camera's own")),
                   Catch::Contains("quote"));
    }
}

TEST_CASE("Headers that would be misread are refused with the reason") {
    const auto refused = [](const std::string& text, const std::string& reason) {
        CHECK_THAT(message_of(with_card(tan_cards(), text)), Catch::Contains(reason));
    };
    refused("CTYPE2  = 'DEC--SIN'", "CTYPE2");
    refused("CTYPE1  = 'GLON-TAN'", "RA and DEC");
    refused("CTYPE1  = 150.0", "a text in quotes");
    refused("CRVAL1  = 'x'", "a finite number");
    refused("CRVAL1  = NaN", "a finite number");
    refused("CRVAL1  = 1E400", "a finite number");
    refused("CD1_1   = 0.0", "singular");
    refused("RADESYS = 'FK4'", "ICRS");
    refused("EQUINOX = 1950.0", "2000");
    refused("WCSAXES = 3", "WCSAXES");
    refused("CTYPE3  = 'FREQ'", "a third axis");
    refused("CPDIS1  = 'LOOKUP'", "look-up table");
    refused("A_ORDER = 3", "-SIP");
    Cards twice = tan_cards();
    twice.push_back(card("CRVAL1  = 151.0"));
    CHECK_THAT(message_of(twice), Catch::Contains("two cards that disagree"));
    CHECK_THAT(message_of({card("CTYPE1  = 'RA---TAN'")}), Catch::Contains("CTYPE2"));
    CHECK_FALSE(Wcs::present({card("CTYPE1  = 'RA---TAN'")}));
}

TEST_CASE("A thousand mutilated headers are read or refused, and never crash") {
    std::mt19937 random(1);
    const Cards good = cards_of_file("reference/wcs/same_solution_sip.hdr");
    int refused = 0;
    for (int trial = 0; trial < 1000; ++trial) {
        Cards cards = good;
        for (int flips = 0; flips < 20; ++flips) {
            std::string& victim = cards[random() % cards.size()];
            victim[random() % victim.size()] = static_cast<char>(random() % 256);
        }
        refused += message_of(cards) == "no error" ? 0 : 1;
    }
    // Some 70 of 370 cards matter; 20 flips hit many of them.
    CHECK(refused > 100);
}

TEST_CASE("Several threads may use one solution at once") {
    const Wcs wcs(cards_of_file("reference/wcs/same_solution_tpv.hdr"), "tpv", "");
    std::vector<SkyPoint> expected;
    for (int i = 0; i < 500; ++i) {
        expected.push_back(wcs.sky_from_detector({4.0 * i, 8.0 * i}));
    }
    std::array<int, 4> wrong{};
    std::vector<std::thread> threads;
    for (int& count : wrong) {
        threads.emplace_back([&wcs, &expected, &count] {
            for (int i = 0; i < 500; ++i) {
                const SkyPoint sky = wcs.sky_from_detector({4.0 * i, 8.0 * i});
                const auto back = wcs.detector_from_sky(sky);
                const bool same = sky.ra_deg == expected[static_cast<std::size_t>(i)].ra_deg &&
                                  sky.dec_deg == expected[static_cast<std::size_t>(i)].dec_deg;
                count += same && back && std::abs(back->x_px - 4.0 * i) < 1e-6 ? 0 : 1;
            }
        });
    }
    for (std::thread& thread : threads) {
        thread.join();
    }
    CHECK(wrong == std::array<int, 4>{});
}

namespace {

struct PlacedCamera {
    Camera camera;
    Pointing pointing;
};

PlacedCamera camera_of(const ReferenceTable::Row& row) {
    PlacedCamera out;
    out.camera.path = "camera.yaml";
    out.camera.telescope.focal_length_mm = 8280.0;
    out.camera.focal_plane.pixel_um = 15.0;
    out.camera.focal_plane.parity = static_cast<int>(number(row, "parity"));
    out.camera.focal_plane.k1 = number(row, "k1");
    out.camera.focal_plane.k2 = number(row, "k2");
    Detector detector;
    detector.id = "d1";
    detector.width = 2048;
    detector.height = 2048;
    detector.centre = {number(row, "centre_x_mm"), number(row, "centre_y_mm")};
    detector.rotation_deg = number(row, "rotation_deg");
    detector.flip = number(row, "flip") != 0.0;
    out.camera.detectors.push_back(detector);
    out.pointing.boresight = {number(row, "ra_deg"), number(row, "dec_deg")};
    out.pointing.psi_deg = number(row, "psi_deg");
    return out;
}

/// Numbers of cards, and the polynomials of the SIP convention evaluated term by term.
class CardValues {
public:
    explicit CardValues(const std::vector<std::string>& cards) {
        for (const std::string& text : cards) {
            if (text[10] != '\'') {
                values_[text.substr(0, text.find_last_not_of(' ', 7) + 1)] =
                    std::stod(text.substr(10));
            }
        }
    }
    double operator()(const std::string& keyword) const { return values_.at(keyword); }
    [[nodiscard]] double polynomial(const std::string& name, double u, double v) const {
        double sum = 0.0;
        for (int p = 0; p <= 9; ++p) {
            for (int q = 0; q <= 9; ++q) {
                const auto term =
                    values_.find(name + "_" + std::to_string(p) + "_" + std::to_string(q));
                sum += term == values_.end() ? 0.0 : term->second * std::pow(u, p) * std::pow(v, q);
            }
        }
        return sum;
    }

private:
    std::map<std::string, double> values_;
};

}  // namespace

TEST_CASE("Pixels look where vectors say they look") {
    // The reference prints 12 decimals; Newton's inverse is good to 1e-14 rad.
    constexpr double kTolerance_deg = 1e-11;
    for (const auto& row : ReferenceTable("wcs_cards/positions.csv").rows) {
        const PlacedCamera placed = camera_of(row);
        const DetectorPoint pixel{number(row, "x_px"), number(row, "y_px")};
        const SkyPoint star{number(row, "star_ra_deg"), number(row, "star_dec_deg")};
        CHECK(separation(sky_from_detector(placed.camera, placed.pointing, 0, pixel), star) <
              kTolerance_deg);
        const auto back = detector_from_sky(placed.camera, placed.pointing, 0, star);
        REQUIRE(back);
        CHECK(std::hypot(back->x_px - pixel.x_px, back->y_px - pixel.y_px) < 1e-6);
    }
    const PlacedCamera placed = camera_of(ReferenceTable("wcs_cards/positions.csv").rows.front());
    CHECK_FALSE(detector_from_sky(placed.camera, placed.pointing, 0, {330.0, -2.0}));
}

TEST_CASE("The cards written for a detector hold its geometry to 0.02 px, read by WCSLIB") {
    for (const auto& row : ReferenceTable("wcs_cards/positions.csv").rows) {
        const PlacedCamera placed = camera_of(row);
        const std::vector<std::string> cards = wcs_cards(placed.camera, placed.pointing, 0);
        for (const std::string& text : cards) {
            CHECK(text.size() == 80);
        }
        const Wcs wcs(cards, "mask", "");
        const DetectorPoint pixel{number(row, "x_px"), number(row, "y_px")};
        const SkyPoint star{number(row, "star_ra_deg"), number(row, "star_dec_deg")};
        const double pixel_deg = 0.015 / 8280.0 * 180.0 / M_PI;
        CHECK(separation(wcs.sky_from_detector(pixel), star) < 0.02 * pixel_deg);
        const auto back = wcs.detector_from_sky(star);
        REQUIRE(back);
        CHECK(std::hypot(back->x_px - pixel.x_px, back->y_px - pixel.y_px) < 0.02);
    }
}

TEST_CASE("The inverse polynomials of the cards lead from the sky to the pixel by themselves") {
    // WCSLIB iterates and would find its way without them; other readers take AP and BP as they
    // are.
    for (const auto& row : ReferenceTable("wcs_cards/positions.csv").rows) {
        const PlacedCamera placed = camera_of(row);
        const CardValues cards(wcs_cards(placed.camera, placed.pointing, 0));
        const auto plane = tangent_from_sky(
            placed.pointing.boresight, {number(row, "star_ra_deg"), number(row, "star_dec_deg")});
        REQUIRE(plane);
        const double xi = plane->xi_rad * 180.0 / M_PI;
        const double eta = plane->eta_rad * 180.0 / M_PI;
        const double determinant =
            cards("CD1_1") * cards("CD2_2") - cards("CD1_2") * cards("CD2_1");
        const double u = (cards("CD2_2") * xi - cards("CD1_2") * eta) / determinant;
        const double v = (cards("CD1_1") * eta - cards("CD2_1") * xi) / determinant;
        // FITS counts pixels from 1.
        CHECK(u + cards.polynomial("AP", u, v) + cards("CRPIX1") - 1.0 ==
              Approx(number(row, "x_px")).margin(0.001));
        CHECK(v + cards.polynomial("BP", u, v) + cards("CRPIX2") - 1.0 ==
              Approx(number(row, "y_px")).margin(0.001));
    }
}

TEST_CASE("A distortion that no polynomial holds is refused, naming the camera file") {
    PlacedCamera placed = camera_of(ReferenceTable("wcs_cards/positions.csv").rows.front());
    placed.camera.focal_plane.k1 = 3e6;
    CHECK_THROWS_WITH(wcs_cards(placed.camera, placed.pointing, 0),
                      Catch::Contains("camera.yaml: focal_plane.distortion"));
}

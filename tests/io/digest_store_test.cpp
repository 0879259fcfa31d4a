#include "io/digest_store.h"

#include <bit>
#include <catch2/catch.hpp>
#include <cerrno>
#include <cstring>
#include <filesystem>
#include <fstream>
#include <limits>
#include <random>
#include <sstream>

#include "core/error.h"
#include "io/files.h"
#include "io/fits_writer.h"
#include "io/mask_fixture.h"
#include "io/outside.h"

namespace straymark {
namespace {

/// Any bit pattern: infinities, NaN with payloads, negative zero, subnormals.
float any_float(std::mt19937& random) {
    return std::bit_cast<float>(static_cast<std::uint32_t>(random()));
}
double any_double(std::mt19937& random) {
    return std::bit_cast<double>((static_cast<std::uint64_t>(random()) << 32U) | random());
}
std::int32_t any_int(std::mt19937& random) {
    return static_cast<std::int32_t>(random());
}

/// Bytes of all values, quotes, per cent signs, and the blanks that FITS strings lose.
std::string any_text(std::mt19937& random) {
    std::string text(random() % 200, '\0');
    for (char& c : text) {
        constexpr std::string_view kAwkward = " %'&~\n";
        c = random() % 3 == 0 ? kAwkward[random() % kAwkward.size()]
                              : static_cast<char>(random() % 256);
    }
    return text;
}

AmplifierDigest any_amplifier(std::mt19937& random, std::size_t values) {
    AmplifierDigest amplifier;
    amplifier.state = static_cast<AmplifierState>(random() % 4);
    amplifier.reason = any_text(random);
    for (double* number :
         {&amplifier.bias_adu, &amplifier.sky_adu, &amplifier.noise_adu, &amplifier.floor_adu}) {
        *number = any_double(random);
    }
    for (std::size_t i = 0; i < values; ++i) {
        amplifier.values.push_back(any_float(random));
    }
    for (std::uint32_t first = 0; first + 9 < values; first += 9) {
        amplifier.runs.push_back({any_int(random), any_int(random), 9, first});
        amplifier.saturated.push_back({any_int(random), any_int(random), any_int(random)});
    }
    amplifier.invalid.assign(random() % 3, {1, -2, 3});
    return amplifier;
}

ExposureDigest any_digest(unsigned seed, int detectors, int amplifiers, std::size_t values) {
    std::mt19937 random(seed);
    ExposureDigest digest;
    ExposureHeader& header = digest.header;
    header.id = "petrel/0001 " + any_text(random);
    header.sequence = random() % 2 == 0 ? std::optional(any_text(random)) : std::nullopt;
    header.type = static_cast<ExposureType>(random() % 5);
    header.type_value = any_text(random);
    header.filter = any_text(random);
    header.mode = any_text(random);
    header.pier_flipped = random() % 2 == 0;
    header.temperature = random() % 2 == 0 ? std::optional(-95.1234567890123) : std::nullopt;
    header.notes = {any_text(random), "", any_text(random)};
    digest.camera_digest = "xxh128:0";
    digest.input_digests = {any_text(random)};
    digest.pointing.reason = any_text(random);
    digest.pointing.refined = random() % 2 == 0;
    digest.pointing.matched_stars = any_int(random);
    for (double* number :
         {&header.clear.days, &header.start.days, &header.end.days, &header.readout_end.days,
          &header.exposure_s, &header.boresight.ra_deg, &header.boresight.dec_deg, &header.psi_deg,
          &digest.pointing.boresight.ra_deg, &digest.pointing.boresight.dec_deg,
          &digest.pointing.psi_deg, &digest.pointing.residual_px, &digest.pointing.shift_arcsec,
          &digest.pointing.turn_deg, &digest.transparency}) {
        *number = any_double(random);
    }
    for (int d = 0; d < detectors; ++d) {
        DetectorDigest& detector = digest.detectors.emplace_back();
        detector.present = d % 2 == 0;
        detector.reason = any_text(random);
        detector.raw_file = any_text(random);
        detector.psf.source = static_cast<PsfSource>(d % 3);
        detector.psf.radius = d;
        detector.psf.values.resize(d == 1 ? 0
                                          : static_cast<std::size_t>((2 * d + 1) * (2 * d + 1)));
        for (float& value : detector.psf.values) {
            value = any_float(random);
        }
        detector.psf.fwhm_px = any_double(random);
        detector.psf.noise_equivalent_area_px = any_double(random);
        detector.psf.stars = any_int(random);
        detector.bleed.assign(random() % 5, {any_int(random), 2, 3});
        detector.stars.assign(random() % 5, {{any_double(random), any_double(random)},
                                             any_float(random),
                                             any_float(random),
                                             any_float(random)});
        detector.header_wcs.assign(random() % 3, "CTYPE1  = 'RA---TAN'" + std::string(60, ' '));
        for (int a = 0; a < amplifiers; ++a) {
            detector.amplifiers.push_back(any_amplifier(random, a == 1 ? 0 : values));
        }
    }
    return digest;
}

/// Equality of bits: NaN equals itself, 0 differs from -0.
template <typename T>
bool same(const T& a, const T& b) {
    if constexpr (std::is_arithmetic_v<T>) {
        return std::memcmp(&a, &b, sizeof a) == 0;
    } else {
        return a == b;
    }
}
template <typename T>
bool same_list(const std::vector<T>& a, const std::vector<T>& b) {
    return std::equal(a.begin(), a.end(), b.begin(), b.end(), same<T>);
}

void check_same_header(const ExposureHeader& a, const ExposureHeader& b) {
    CHECK(a.id == b.id);
    CHECK(a.sequence == b.sequence);
    CHECK(a.type == b.type);
    CHECK(a.type_value == b.type_value);
    CHECK(a.filter == b.filter);
    CHECK(a.mode == b.mode);
    CHECK(a.pier_flipped == b.pier_flipped);
    CHECK(a.temperature == b.temperature);
    CHECK(a.notes == b.notes);
    CHECK(same(a.clear.days, b.clear.days));
    CHECK(same(a.start.days, b.start.days));
    CHECK(same(a.end.days, b.end.days));
    CHECK(same(a.readout_end.days, b.readout_end.days));
    CHECK(same(a.exposure_s, b.exposure_s));
    CHECK(same(a.boresight.ra_deg, b.boresight.ra_deg));
    CHECK(same(a.boresight.dec_deg, b.boresight.dec_deg));
    CHECK(same(a.psi_deg, b.psi_deg));
}

void check_same_pointing(const Pointing& a, const Pointing& b) {
    CHECK(same(a.boresight.ra_deg, b.boresight.ra_deg));
    CHECK(same(a.boresight.dec_deg, b.boresight.dec_deg));
    CHECK(same(a.psi_deg, b.psi_deg));
    CHECK(a.refined == b.refined);
    CHECK(a.matched_stars == b.matched_stars);
    CHECK(same(a.residual_px, b.residual_px));
    CHECK(same(a.shift_arcsec, b.shift_arcsec));
    CHECK(same(a.turn_deg, b.turn_deg));
    CHECK(a.reason == b.reason);
}

void check_same_amplifier(const AmplifierDigest& a, const AmplifierDigest& b) {
    CHECK(a.state == b.state);
    CHECK(a.reason == b.reason);
    CHECK(same(a.bias_adu, b.bias_adu));
    CHECK(same(a.sky_adu, b.sky_adu));
    CHECK(same(a.noise_adu, b.noise_adu));
    CHECK(same(a.floor_adu, b.floor_adu));
    CHECK(a.runs == b.runs);
    CHECK(same_list(a.values, b.values));
    CHECK(a.saturated == b.saturated);
    CHECK(a.invalid == b.invalid);
}

void check_same_detector(const DetectorDigest& a, const DetectorDigest& b) {
    CHECK(a.present == b.present);
    CHECK(a.reason == b.reason);
    CHECK(a.raw_file == b.raw_file);
    CHECK(a.psf.source == b.psf.source);
    CHECK(a.psf.radius == b.psf.radius);
    CHECK(same_list(a.psf.values, b.psf.values));
    CHECK(same(a.psf.fwhm_px, b.psf.fwhm_px));
    CHECK(same(a.psf.noise_equivalent_area_px, b.psf.noise_equivalent_area_px));
    CHECK(a.psf.stars == b.psf.stars);
    CHECK(a.bleed == b.bleed);
    CHECK(a.header_wcs == b.header_wcs);
    REQUIRE(a.stars.size() == b.stars.size());
    for (std::size_t i = 0; i < a.stars.size(); ++i) {
        CHECK(same(a.stars[i].position.x_px, b.stars[i].position.x_px));
        CHECK(same(a.stars[i].position.y_px, b.stars[i].position.y_px));
        CHECK(same(a.stars[i].flux_e, b.stars[i].flux_e));
        CHECK(same(a.stars[i].flux_error_e, b.stars[i].flux_error_e));
        CHECK(same(a.stars[i].position_error_px, b.stars[i].position_error_px));
    }
    REQUIRE(a.amplifiers.size() == b.amplifiers.size());
    for (std::size_t i = 0; i < a.amplifiers.size(); ++i) {
        check_same_amplifier(a.amplifiers[i], b.amplifiers[i]);
    }
}

void check_same_digest(const ExposureDigest& a, const ExposureDigest& b) {
    check_same_header(a.header, b.header);
    check_same_pointing(a.pointing, b.pointing);
    CHECK(a.camera_digest == b.camera_digest);
    CHECK(a.input_digests == b.input_digests);
    CHECK(same(a.transparency, b.transparency));
    REQUIRE(a.detectors.size() == b.detectors.size());
    for (std::size_t i = 0; i < a.detectors.size(); ++i) {
        check_same_detector(a.detectors[i], b.detectors[i]);
    }
}

ExposureDigest plain_digest(const std::string& id, double start) {
    ExposureDigest digest;
    digest.header.id = id;
    digest.header.start.days = start;
    return digest;
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

std::size_t files_in(const std::string& folder) {
    return static_cast<std::size_t>(std::distance(std::filesystem::directory_iterator(folder), {}));
}

}  // namespace

TEST_CASE("A digest comes back bit for bit, whatever its numbers and texts") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    for (unsigned seed = 0; seed < 20; ++seed) {
        const ExposureDigest saved = any_digest(seed, static_cast<int>(seed % 4), 3, 40);
        store.save(saved);
        const std::optional<ExposureDigest> loaded = store.load(saved.header.id);
        REQUIRE(loaded.has_value());
        check_same_digest(saved, *loaded);
    }
    CHECK(files_in(folder.path()) == 20);
    CHECK_FALSE(store.load("never saved").has_value());
}

TEST_CASE("A digest file passes the standard verifier") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    const ExposureDigest digest = any_digest(3, 3, 4, 100);
    store.save(digest);
    const test::CommandResult verdict = test::verify(store.path_of(digest.header.id));
    INFO(verdict.output);
    CHECK(verdict.output.find(test::kNoFault) != std::string::npos);
}

TEST_CASE("Exposures are listed in order of their start") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.file("not yet there"));
    CHECK(store.ids().empty());
    store.save(plain_digest("b", 60000.5));
    store.save(plain_digest("a", 60000.5 + 1e-9));
    store.save(plain_digest("c", 59999.0));
    store.save(plain_digest("c", 60001.0));  // again, with another start: replaces the first
    store.save(plain_digest("", 1.0));
    CHECK(store.ids() == std::vector<std::string>{"", "b", "a", "c"});
}

TEST_CASE("An exposure id cannot lead out of the folder nor hide or overwrite another") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    const std::vector<std::string> hostile = {"../../escape",
                                              "/absolute",
                                              "..",
                                              ".",
                                              ".hidden",
                                              "-rf",
                                              "a/b",
                                              "a%2Fb",
                                              "a b",
                                              "a b ",
                                              std::string("nul\0inside", 10),
                                              "new\nline",
                                              "%",
                                              "",
                                              std::string(5000, 'x'),
                                              std::string(5000, 'x') + "y",
                                              std::string(5000, '/')};
    for (std::size_t i = 0; i < hostile.size(); ++i) {
        store.save(plain_digest(hostile[i], static_cast<double>(i)));
    }
    CHECK(files_in(folder.path()) == hostile.size());
    CHECK(store.ids() == hostile);
    for (const std::string& id : hostile) {
        const std::filesystem::path path = store.path_of(id);
        CHECK(path.parent_path() == folder.path());
        CHECK(path.filename().string().front() != '.');
        CHECK(path.filename().string().size() < 200);
        CHECK(store.load(id)->header.id == id);
    }
}

TEST_CASE("A damaged digest is refused, and is listed so that it is seen") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    store.save(plain_digest("later", 60002.0));
    const ExposureDigest digest = any_digest(11, 1, 2, 12);
    ExposureDigest named = digest;
    named.header.id = "a/1";
    named.header.start.days = 60000.0;
    store.save(named);
    const std::string path = store.path_of("a/1");
    const std::string whole = read_bytes(path);
    CHECK(store.ids() == std::vector<std::string>{"a/1", "later"});

    SECTION("any byte changed") {
        for (std::size_t at = 0; at < whole.size(); at += 131) {
            std::string damaged = whole;
            damaged[at] = static_cast<char>(damaged[at] ^ 0x20);
            write_bytes(path, damaged);
            CHECK_THROWS_AS(store.load("a/1"), InputError);
            CHECK(store.ids().size() == 2);
        }
    }
    SECTION("cut short") {
        for (std::size_t size = 0; size < whole.size(); size += 2880) {
            write_bytes(path, whole.substr(0, size));
            CHECK_THROWS_AS(store.load("a/1"), InputError);
            CHECK(store.ids() == std::vector<std::string>{"later", "a/1"});
        }
    }
    SECTION("under another exposure's name") {
        std::filesystem::copy_file(path, store.path_of("b"));
        CHECK_THROWS_WITH(store.load("b"), Catch::Contains("'b'"));
    }
    SECTION("of another version") {
        io::HeaderCards cards;
        cards.add_text("FORMAT", "straymark-digest/2");
        cards.add_text("OBS_ID", "a/1");
        io::write_fits(path, cards, {});
        CHECK_THROWS_WITH(store.load("a/1"), Catch::Contains("another version"));
    }
}

TEST_CASE("Lists that contradict each other are refused though every sum holds") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    ExposureDigest digest = plain_digest("a", 60000.0);
    digest.detectors.resize(1);
    digest.detectors[0].amplifiers.resize(1);
    AmplifierDigest& amplifier = digest.detectors[0].amplifiers[0];
    amplifier.values = {1.0F, 2.0F};
    SECTION("a run of more values than there are") {
        amplifier.runs = {{0, 0, 3, 0}};
    }
    SECTION("a run that begins behind them") {
        amplifier.runs = {{0, 0, 1, 0xFFFFFFFF}};
    }
    SECTION("a run of negative length") {
        amplifier.runs = {{0, 0, -1, 1}};
    }
    SECTION("a PSF that is not a square of its radius") {
        digest.detectors[0].psf.radius = 1;
        digest.detectors[0].psf.values.resize(10);
    }
    store.save(digest);
    CHECK_THROWS_AS(store.load("a"), InputError);
}

TEST_CASE("Where saving fails the digest that was there stays, and nothing else is left") {
    const test::ScratchFolder folder;
    io::DigestFolder store(folder.path());
    store.save(plain_digest("a", 60000.0));
    for (const io::FileOperation fails :
         {io::FileOperation::write, io::FileOperation::sync, io::FileOperation::rename}) {
        io::set_file_fault([fails](io::FileOperation operation, const std::string&) {
            return operation == fails ? ENOSPC : 0;
        });
        CHECK_THROWS_AS(store.save(plain_digest("a", 60001.0)), SystemError);
        io::set_file_fault(nullptr);
        CHECK(store.load("a")->header.start.days == 60000.0);
        CHECK(files_in(folder.path()) == 1);
    }
}

}  // namespace straymark

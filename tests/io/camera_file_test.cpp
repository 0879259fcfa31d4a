#include "io/camera_file.h"

#include <catch2/catch.hpp>
#include <filesystem>
#include <fmt/format.h>

#include "core/error.h"
#include "support/temporary_folder.h"

using namespace straymark;
using namespace straymark::io;
using straymark::test::contents;
using straymark::test::TemporaryFolder;
using straymark::test::with;

namespace {

const std::string kCameraFiles = std::string(STRAYMARK_TEST_DATA) + "/camera_files/";

/// The example camera in a folder of its own, to be damaged.
class CameraCopy {
public:
    CameraCopy() {
        for (const char* name : {"petrel.yaml", "petrel_amplifiers.csv", "petrel_pairs.csv"}) {
            folder_.write(name, contents(kCameraFiles + name));
        }
    }
    [[nodiscard]] std::string path() const { return folder_.file("petrel.yaml"); }
    /// Replaces the one occurrence of a text.
    CameraCopy& change(const std::string& from, const std::string& to,
                       const std::string& file = "petrel.yaml") {
        folder_.write(file, with(contents(folder_.file(file)), from, to));
        return *this;
    }
    [[nodiscard]] Camera load() const { return load_camera(path()); }
    [[nodiscard]] std::string message() const {
        try {
            (void)load();
        } catch (const InputError& error) {
            return error.what();
        }
        return "no error";
    }

private:
    TemporaryFolder folder_;
};

std::string message_of_change(const std::string& from, const std::string& to) {
    return CameraCopy().change(from, to).message();
}

}  // namespace

TEST_CASE("the example camera is read as it is written") {
    const Camera camera = load_camera(kCameraFiles + "petrel.yaml");
    CHECK(camera.name == "petrel");
    CHECK(camera.path == kCameraFiles + "petrel.yaml");
    CHECK(camera.observatory.latitude_deg == 31.2);
    CHECK(camera.observatory.longitude_deg == -110.4);
    CHECK(camera.observatory.height_m == 2120.0);
    CHECK(camera.telescope.mount == Mount::altaz);
    CHECK(camera.telescope.derotated);
    CHECK_FALSE(camera.telescope.pier_flipped.has_value());
    CHECK(camera.telescope.aperture_mm == 2300.0);
    CHECK(camera.telescope.obstruction_mm == 920.0);
    CHECK(camera.telescope.focal_length_mm == 8280.0);
    REQUIRE(camera.telescope.struts.size() == 4);
    CHECK(camera.telescope.struts[1].angle_deg == 131.0);
    CHECK(camera.telescope.struts[1].width_mm == 14.0);
    CHECK(camera.telescope.struts[1].inner_mm == 460.0);
    CHECK(camera.telescope.struts[1].outer_mm == 1150.0);
    CHECK(camera.focal_plane.pixel_um == 15.0);
    CHECK(camera.focal_plane.parity == 1);
    CHECK(camera.focal_plane.camera_angle.keyword == "CAMANG");
    CHECK(camera.focal_plane.camera_angle.sign == 1);
    CHECK(camera.focal_plane.k1 == 2.5);
    CHECK(camera.filters.at("g").wavelength_nm == 480.0);
    CHECK(camera.filters.at("r").width_nm == 138.0);
    CHECK(camera.filters.at("r").zero_point == 25.9);
    CHECK(camera.filters.at("r").extinction == 0.1);
    CHECK(camera.readout_s == 22.0);
    CHECK(camera.types.at(ExposureType::sky) == std::vector<std::string>{"OBJECT", "SKY"});
    CHECK(camera.types.at(ExposureType::focus) == std::vector<std::string>{"FOCUS"});
}

TEST_CASE("the example camera's detectors and amplifiers are complete") {
    const Camera camera = load_camera(kCameraFiles + "petrel.yaml");
    REQUIRE(camera.detectors.size() == 4);
    const Detector& d4 = camera.detectors[3];
    CHECK(d4.id == "d4");
    CHECK(d4.width == 2048);
    CHECK(d4.centre.x_mm == 15.6);
    CHECK(d4.centre.y_mm == -15.6);
    CHECK(d4.rotation_deg == 90.0);
    CHECK_FALSE(d4.flip);
    CHECK(camera.detectors[1].flip);
    CHECK(d4.board == "b2");
    CHECK(d4.read == RowRead::transfer);
    REQUIRE(d4.amplifiers.size() == 16);
    CHECK(d4.amplifiers[11].id == "a12");
    CHECK(d4.amplifiers[11].status == AmplifierStatus::dead);
    CHECK(d4.amplifiers[10].status == AmplifierStatus::live);
    // a10: FITS section [257, 512, 1025, 2048], upper_left, prescan 8.
    const ReadoutGeometry& readout = d4.amplifiers[9].readout;
    CHECK(readout.section() == PixelBox{256, 1024, 512, 2048});
    CHECK(readout.detector_from_readout({8, 0}) == DetectorPixel{256, 2047});
    CHECK(readout.first_tick() == 8);
    // The first row of the amplifier table is "d1,a01,1.696,7.07,63700,102000", the row of d2/a05
    // has no full well.
    const Amplifier& first = camera.detectors[0].amplifiers[0];
    CHECK(first.gain_e_per_adu == 1.696);
    CHECK(first.read_noise_e == 7.07);
    CHECK(first.saturation_adu == 63700.0);
    CHECK(first.full_well_e == 102000.0);
    CHECK_FALSE(camera.detectors[1].amplifiers[4].full_well_e.has_value());
    const auto groups = camera.clock_groups();
    REQUIRE(groups.size() == 1);
    CHECK(groups.at("main").size() == 63);
    const AmplifierRef source = *camera.amplifier_ref("d3/a01");
    const AmplifierRef victim = *camera.amplifier_ref("d1/a01");
    CHECK(camera.pair_offset_ticks.at({source, victim}) == 1);
    CHECK(camera.pair_offset_ticks.at({victim, source}) == -1);
    CHECK(camera.pair_offset_ticks.size() == 3);
}

TEST_CASE("the example camera's keywords and raw layout are kept") {
    const Camera camera = load_camera(kCameraFiles + "petrel.yaml");
    CHECK(camera.headers.id == "OBS_ID");
    CHECK(camera.headers.sequence == "RUNSEQ");
    CHECK(camera.headers.type == "IMAGETYP");
    CHECK(camera.headers.start.date == "MJD-OBS");
    CHECK_FALSE(camera.headers.start.time.has_value());
    CHECK(camera.headers.end == "MJD-END");
    CHECK(camera.headers.exposure == "EXPTIME");
    CHECK(camera.headers.clear == "MJD-CLR");
    CHECK(camera.headers.readout_end == "MJD-RD");
    CHECK(camera.headers.filter == "FILTER");
    CHECK(camera.headers.ra == "RA");
    CHECK(camera.headers.dec == "DEC");
    CHECK_FALSE(camera.headers.pier_side.has_value());
    CHECK(camera.headers.temperature == "CCDTEMP");
    CHECK(camera.raw.hdu == "{detector}_{amplifier}");
    CHECK(camera.raw.data == "DATASEC");
    CHECK(camera.raw.bias == "BIASSEC");
    CHECK(camera.raw.prescan == "PRESEC");
    CHECK(camera.raw.detector_section == "DETSEC");
    CHECK(camera.raw.order == PixelOrder::readout);
}

TEST_CASE("the camera's digest changes with any of its files and with nothing else") {
    const std::string digest = load_camera(kCameraFiles + "petrel.yaml").digest;
    CHECK(digest.starts_with("xxh128:"));
    CameraCopy copy;
    CHECK(copy.load().digest == digest);
    copy.change("readout_s: 22.0", "readout_s: 22.1");
    const std::string changed = copy.load().digest;
    CHECK(changed != digest);
    copy.change("d1,a01,1.696", "d1,a01,1.697", "petrel_amplifiers.csv");
    CHECK(copy.load().digest != changed);
    const std::string twice = copy.load().digest;
    copy.change("d3/a02,d1/a02,1", "d3/a02,d1/a02,2", "petrel_pairs.csv");
    CHECK(copy.load().digest != twice);
}

TEST_CASE("defaults are those of the documentation") {
    CameraCopy copy;
    copy.change("    prescan: 8\n    serial: x\n    read: transfer\n", "")
        .change("distortion: [2.5, 0.0]", "x_remark: none")
        .change("  derotated: true\n", "")
        .change("camera_angle_deg: {keyword: CAMANG, sign: 1, zero: 0}", "camera_angle_deg: {}")
        .change("rotation_deg: 0, flip: false, clock: main, board: b1, role: science}",
                "clock: main}")
        .change("types: {sky: [OBJECT, SKY], dark: [DARK], flat: [FLAT], focus: [FOCUS]}\n", "")
        .change("type: IMAGETYP, ", "")
        .change("pair_table: petrel_pairs.csv\n", "")
        .change("order: readout", "x_order: stated by DETSEC");
    const Camera camera = copy.load();
    const Detector& d1 = camera.detectors[0];
    CHECK(d1.amplifiers[0].readout.first_tick() == 0);
    CHECK(d1.serial == SerialAxis::x);
    CHECK(d1.read == RowRead::transfer);
    CHECK(d1.rotation_deg == 0.0);
    CHECK_FALSE(d1.flip);
    CHECK(d1.board == "d1");
    CHECK(d1.role == DetectorRole::science);
    CHECK(camera.focal_plane.k1 == 0.0);
    CHECK(camera.focal_plane.k2 == 0.0);
    CHECK(camera.telescope.derotated);
    CHECK_FALSE(camera.focal_plane.camera_angle.keyword.has_value());
    CHECK(camera.focal_plane.camera_angle.sign == 1);
    CHECK(camera.focal_plane.camera_angle.zero_deg == 0.0);
    CHECK(camera.types.empty());
    CHECK(camera.pair_offset_ticks.empty());
    CHECK(camera.raw.order == PixelOrder::unstated);
}

TEST_CASE("one amplifier may have a clock of its own and a suffix for keywords") {
    CameraCopy copy;
    copy.change("amplifiers: {a12: {status: dead}}", "amplifiers: {a12: {clock: mux}}")
        .change("id: a01,", "id: a01, suffix: A,")
        .change("serial: x", "serial: y")
        .change("read: transfer", "read: in_place");
    const Camera camera = copy.load();
    CHECK(camera.detectors[3].amplifiers[11].clock == "mux");
    CHECK(camera.clock_groups().at("mux") == std::vector<AmplifierRef>{{3, 11}});
    CHECK(camera.detectors[2].amplifiers[0].suffix == "A");
    CHECK(camera.detectors[0].read == RowRead::in_place);
    // Serial along y: the first tick's neighbour lies above it (a01 sits at the lower left).
    CHECK(camera.detectors[0].amplifiers[0].readout.detector_from_readout({9, 0}) ==
          DetectorPixel{0, 1});
}

TEST_CASE("start may be a date and a time of day") {
    CameraCopy copy;
    copy.change("start: MJD-OBS", "start: {date: DATE-OBS, time: UTSTART}");
    const Camera camera = copy.load();
    CHECK(camera.headers.start.date == "DATE-OBS");
    CHECK(camera.headers.start.time == "UTSTART");
}

TEST_CASE("raw sections may be literal or named by a pattern") {
    CameraCopy copy;
    copy.change("data: DATASEC", "data: \"[ 9:264 , 1:1024 ]\"")
        .change("bias: BIASSEC", "bias: \"BIAS{number}\"")
        .change("prescan: PRESEC", "prescan: \"HIERARCH PETREL PRE{amplifier}\"");
    const Camera camera = copy.load();
    CHECK(camera.raw.data == "[ 9:264 , 1:1024 ]");
    CHECK(camera.raw.bias == "BIAS{number}");
    CHECK(camera.raw.prescan == "HIERARCH PETREL PRE{amplifier}");
}

TEST_CASE("a wrong unit is met with the one that would fit") {
    CHECK_THAT(message_of_change("focal_length_mm: 8280", "focal_length_mm: 8.28"),
               Catch::Contains("line 10, column 20, telescope.focal_length_mm") &&
                   Catch::Contains("is it in metres? Then write 8280"));
    CHECK_THAT(message_of_change("aperture_mm: 2300", "aperture_mm: 2.3"),
               Catch::Contains("metres? Then write 2300"));
    CHECK_THAT(message_of_change("pixel_um: 15", "pixel_um: 0.015"),
               Catch::Contains("millimetres? Then write 15"));
    CHECK_THAT(message_of_change("wavelength_nm: 480", "wavelength_nm: 48000"),
               Catch::Contains("angstroms? Then write 4800"));
    CHECK_THAT(message_of_change("height_m: 2120", "height_m: 2120000"),
               Catch::Contains("millimetres? Then write 2120"));
    CHECK_THAT(message_of_change("readout_s: 22.0", "readout_s: 22000"),
               Catch::Contains("milliseconds? Then write 22"));
    // Centres in metres put all detectors on one place.
    CameraCopy copy;
    copy.change("[-15.6, 15.6]", "[-0.0156, 0.0156]").change("[15.6, 15.6]", "[0.0156, 0.0156]");
    CHECK_THAT(copy.message(), Catch::Contains("detectors d1 and d2") &&
                                   Catch::Contains("is centre_mm in millimetres?"));
}

TEST_CASE("numbers outside their ranges are refused where they stand") {
    const std::vector<std::pair<std::string, std::string>> changes{
        {"latitude_deg: 31.2", "latitude_deg: 91"},
        {"longitude_deg: -110.4", "longitude_deg: 361"},
        {"obstruction_mm: 920", "obstruction_mm: 2300"},
        {"obstruction_mm: 920", "obstruction_mm: -1"},
        {"parity: 1", "parity: 0"},
        {"parity: 1", "parity: 2"},
        {"sign: 1", "sign: 0.5"},
        {"pixel_um: 15", "pixel_um: .nan"},
        {"pixel_um: 15", "pixel_um: 010"},
        {"width_nm: 140", "width_nm: 0"},
        {"zero_point: 26.1", "zero_point: 1e3"},
        {"extinction: 0.17", "extinction: -0.1"},
        {"prescan: 8", "prescan: -1"},
        {"prescan: 8", "prescan: 1.5"},
        {"size: [2048, 2048]", "size: [2048]"},
        {"size: [2048, 2048]", "size: [2048, 0]"},
        {"size: [2048, 2048]", "size: [99999, 2048]"},
        {"distortion: [2.5, 0.0]", "distortion: [2.5]"},
        {"distortion: [2.5, 0.0]", "distortion: [.inf, 0]"},
        {"rotation_deg: 90", "rotation_deg: 4000"},
        {"readout_s: 22.0", "readout_s: -1"},
    };
    for (const auto& [from, to] : changes) {
        INFO(to);
        CHECK_THAT(message_of_change(from, to), Catch::Contains("line "));
    }
}

TEST_CASE("mistyped keys and words are met with what was meant") {
    CHECK_THAT(
        message_of_change("focal_length_mm: 8280", "focal_length: 8280"),
        Catch::Contains("line 10, column 3") && Catch::Contains("did you mean 'focal_length_mm'?"));
    CHECK_THAT(message_of_change("observatory:", "observatary:"),
               Catch::Contains("did you mean 'observatory'?"));
    CHECK_THAT(message_of_change("mount: altaz", "mount: alt-az"),
               Catch::Contains("did you mean 'altaz'?"));
    CHECK_THAT(message_of_change("read: transfer", "read: transferred"),
               Catch::Contains("did you mean 'transfer'?"));
    CHECK_THAT(message_of_change("order: readout", "order: read_out"),
               Catch::Contains("did you mean 'readout'?"));
    CHECK_THAT(message_of_change("sequence: RUNSEQ", "sequenze: RUNSEQ"),
               Catch::Contains("did you mean 'sequence'?"));
    CHECK_THAT(message_of_change("derotated: true", "derotated: yes"),
               Catch::Contains("true or false"));
    CHECK_THAT(message_of_change("  parity: 1\n", "  parity: 1\n  parity: -1\n"),
               Catch::Contains("'parity' a second time"));
    CHECK_THAT(message_of_change("{status: dead}", "{state: dead}"),
               Catch::Contains("did you mean 'status'?"));
}

TEST_CASE("each indispensable key is missed") {
    for (const char* keyword : {"id: OBS_ID, ", "start: MJD-OBS, ", "exposure: EXPTIME, ",
                                "filter: FILTER,", "ra: RA, ", "dec: DEC, "}) {
        INFO(keyword);
        const std::string key = std::string(keyword).substr(0, std::string(keyword).find(':'));
        CHECK_THAT(message_of_change(keyword, ""), Catch::Contains("a key '" + key + "'"));
    }
    for (const char* line :
         {"name: petrel\n", "readout_s: 22.0\n", "amplifier_table: petrel_amplifiers.csv\n",
          "  pixel_um: 15\n", "  parity: 1\n", "  aperture_mm: 2300\n",
          "    size: [2048, 2048]\n"}) {
        INFO(line);
        CHECK_THAT(message_of_change(line, ""), Catch::Contains("a key '"));
    }
}

TEST_CASE("headers name FITS keywords") {
    for (const char* keyword :
         {"exptime", "EXPOSURETIME", "EXP TIME", "\"\"", "EXP.TIME", "[EXP]"}) {
        INFO(keyword);
        CHECK_THAT(message_of_change("exposure: EXPTIME", fmt::format("exposure: {}", keyword)),
                   Catch::Contains("headers.exposure"));
    }
    CHECK(message_of_change("exposure: EXPTIME", "exposure: HIERARCH PETREL EXP TIME") ==
          "no error");
}

TEST_CASE("struts lie in the clear aperture") {
    const std::string strut = "angle_deg: 41, width_mm: 14, inner_mm: 460, outer_mm: 1150";
    CHECK_THAT(
        message_of_change(strut, "angle_deg: 41, width_mm: 14, inner_mm: 460, outer_mm: 1151"),
        Catch::Contains("outer_mm") && Catch::Contains("at most 1150 mm"));
    CHECK_THAT(
        message_of_change(strut, "angle_deg: 41, width_mm: 14, inner_mm: 459, outer_mm: 1150"),
        Catch::Contains("the radius of the obstruction"));
    CHECK_THAT(
        message_of_change(strut, "angle_deg: 41, width_mm: 14, inner_mm: 900, outer_mm: 800"),
        Catch::Contains("more than inner_mm"));
    CHECK_THAT(
        message_of_change(strut, "angle_deg: 41, width_mm: 0, inner_mm: 460, outer_mm: 1150"),
        Catch::Contains("above 0"));
}

TEST_CASE("sections tile their detector") {
    CHECK_THAT(message_of_change("id: a02, section: [257, 512, 1, 1024]",
                                 "id: a02, section: [256, 512, 1, 1024]"),
               Catch::Contains("a section that overlaps that of a01"));
    CHECK_THAT(message_of_change("id: a02, section: [257, 512, 1, 1024]",
                                 "id: a02, section: [258, 512, 1, 1024]"),
               Catch::Contains("leave 1024 pixels without an amplifier"));
    CHECK_THAT(message_of_change("id: a02, section: [257, 512, 1, 1024]",
                                 "id: a02, section: [512, 257, 1, 1024]"),
               Catch::Contains("x1 <= x2"));
    CHECK_THAT(message_of_change("id: a08, section: [1793, 2048, 1, 1024]",
                                 "id: a08, section: [1793, 2049, 1, 1024]"),
               Catch::Contains("at most 2048"));
    CHECK_THAT(message_of_change("id: a01, section: [1, 256, 1, 1024]",
                                 "id: a01, section: [0, 256, 1, 1024]"),
               Catch::Contains("at least 1"));
}

TEST_CASE("names are unique, plain and not those of the mask file's tables") {
    CHECK_THAT(message_of_change("id: a02,", "id: a01,"), Catch::Contains("an id of its own"));
    CHECK_THAT(message_of_change("id: a02,", "id: A01,"), Catch::Contains("an id of its own"));
    CHECK_THAT(message_of_change("id: d2,", "id: d1,"), Catch::Contains("'d1' a second time"));
    CHECK_THAT(message_of_change("id: d2,", "id: Bits,"),
               Catch::Contains("table of the mask file"));
    CHECK_THAT(message_of_change("id: d2,", "id: d/2,"), Catch::Contains("letters, digits"));
    CHECK_THAT(message_of_change("id: d2,", "id: \"d 2\","), Catch::Contains("letters, digits"));
    CHECK_THAT(message_of_change("id: d2,", "id: 2,"), Catch::Contains("in quotes: \"2\""));
    CHECK_THAT(message_of_change("name: petrel", "name: ../petrel"), Catch::Contains("letters"));
    CHECK_THAT(message_of_change("{id: d2, layout: sixteen", "{id: d2, layout: seventeen"),
               Catch::Contains("a name under `layouts`"));
    CHECK_THAT(message_of_change("{a12: {status: dead}}", "{a17: {status: dead}}"),
               Catch::Contains("unknown amplifier 'a17'"));
}

TEST_CASE("the amplifier table and the camera hold the same amplifiers") {
    const std::string table = "petrel_amplifiers.csv";
    const auto message = [&](const std::string& from, const std::string& to) {
        return CameraCopy().change(from, to, table).message();
    };
    CHECK_THAT(message("d1,a01,", "d1,a02,"), Catch::Contains("line 3") &&
                                                  Catch::Contains("each amplifier once") &&
                                                  Catch::Contains("line 2 already"));
    CHECK_THAT(message("d1,a01,", "d1,a17,"), Catch::Contains("an amplifier of that detector"));
    CHECK_THAT(message("d1,a01,", "d9,a01,"), Catch::Contains("a detector of the camera file"));
    CHECK_THAT(message("d1,a01,", "#d1,a01,"), Catch::Contains("no row for amplifier d1/a01"));
    CHECK_THAT(message("d1,a01,1.696", "d1,a01,0"),
               Catch::Contains("line 2, column 'gain'") && Catch::Contains("above 0"));
    CHECK_THAT(message("d1,a01,1.696", "d1,a01,-1"), Catch::Contains("'gain'"));
    CHECK_THAT(message("d1,a01,1.696", "d1,a01,nan"), Catch::Contains("a finite number"));
    CHECK_THAT(message("d1,a01,1.696,7.07,63700", "d1,a01,1.696,7.07,0"),
               Catch::Contains("'saturation'"));
    CHECK_THAT(message("d1,a01,1.696,7.07", "d1,a01,1.696,-7.07"), Catch::Contains("'read_noise'"));
    CHECK_THAT(message("saturation,full_well", "saturation,full_wel"),
               Catch::Contains("unknown column 'full_wel'"));
    CHECK_THAT(message("read_noise", "readnoise"), Catch::Contains("column"));
    CHECK_THAT(message_of_change("petrel_amplifiers.csv", "missing.csv"),
               Catch::Contains("missing.csv") && Catch::Contains("No such file"));
}

TEST_CASE("the pair table names pairs that are read in step, each once") {
    const auto message = [&](const std::string& to) {
        return CameraCopy().change("d3/a02,d1/a02,1", to, "petrel_pairs.csv").message();
    };
    CHECK_THAT(message("d3/a02,d3/a02,1"), Catch::Contains("another amplifier"));
    CHECK_THAT(message("d3/a02,d9/a02,1"), Catch::Contains("column 'victim'"));
    CHECK_THAT(message("d3,d1/a02,1"), Catch::Contains("DETECTOR/AMPLIFIER"));
    CHECK_THAT(message("d3/a01,d1/a01,2"), Catch::Contains("each pair once"));
    CHECK_THAT(message("d3/a02,d1/a02,1.5"), Catch::Contains("a whole number"));
    CHECK_THAT(message("d3/a02,d1/a02,10001"), Catch::Contains("-10000 to 10000"));
    CameraCopy other_clock;
    other_clock.change(
        "d3, layout: sixteen, centre_mm: [-15.6, -15.6], rotation_deg: 180, flip: "
        "false, clock: main",
        "d3, layout: sixteen, centre_mm: [-15.6, -15.6], rotation_deg: 180, flip: "
        "false, clock: slow");
    CHECK_THAT(other_clock.message(), Catch::Contains("on the source's clock 'slow'"));
}

TEST_CASE("types, pier side and suffixes need their counterparts") {
    CHECK_THAT(message_of_change("type: IMAGETYP, ", ""), Catch::Contains("headers.type"));
    CHECK_THAT(message_of_change(
                   "types: {sky: [OBJECT, SKY], dark: [DARK], flat: [FLAT], focus: [FOCUS]}\n", ""),
               Catch::Contains("a key 'types'"));
    CHECK_THAT(message_of_change("sky: [OBJECT, SKY], ", ""), Catch::Contains("a key 'sky'"));
    CHECK_THAT(message_of_change("dark: [DARK]", "dark: [Sky]"),
               Catch::Contains("each value of the type keyword once"));
    CHECK_THAT(message_of_change("mount: altaz", "mount: equatorial\n  pier_flipped: W"),
               Catch::Contains("headers.pier_side"));
    CameraCopy equatorial;
    equatorial.change("mount: altaz", "mount: equatorial\n  pier_flipped: W")
        .change("temperature: CCDTEMP", "temperature: CCDTEMP, pier_side: PIERSIDE");
    CHECK(equatorial.load().telescope.pier_flipped == "W");
    CHECK(equatorial.load().headers.pier_side == "PIERSIDE");
    CHECK_THAT(message_of_change("data: DATASEC", "data: \"DATASEC{suffix}\""),
               Catch::Contains("a `suffix` of its own"));
}

TEST_CASE("the raw layout is unambiguous") {
    CHECK_THAT(message_of_change("detector_section: DETSEC, order: readout", "x_none: 1"),
               Catch::Contains("in which order the pixels stand"));
    CHECK_THAT(message_of_change("{detector}_{amplifier}", "{detector}_{amp}"),
               Catch::Contains("only the placeholders"));
    CHECK_THAT(message_of_change("{detector}_{amplifier}", "{detector"),
               Catch::Contains("only the placeholders"));
    CHECK_THAT(message_of_change("{detector}_{amplifier}", "detector}"),
               Catch::Contains("'{' before each '}'"));
    CHECK_THAT(message_of_change("{detector}_{amplifier}", "primary"),
               Catch::Contains("several detectors"));
    CHECK_THAT(message_of_change("data: DATASEC", "data: \"[1:256]\""),
               Catch::Contains("[x1:x2,y1:y2]"));
    CHECK_THAT(message_of_change("data: DATASEC", "data: datasec"), Catch::Contains("raw.data"));
}

TEST_CASE("a distortion that turns back inside the field is refused") {
    CHECK_THAT(message_of_change("distortion: [2.5, 0.0]", "distortion: [-20000, 0.0]"),
               Catch::Contains("turns back at") && Catch::Contains("inside detector"));
    CHECK_THAT(message_of_change("focal_length_mm: 8280", "focal_length_mm: 50"),
               Catch::Contains("no error"));
}

TEST_CASE("hostile sizes end in an error at once") {
    // 64 layouts' worth of detectors times amplifiers would be a hundred million.
    std::string many;
    for (int i = 0; i < 4097; ++i) {
        many += fmt::format("  - {{id: x{}, layout: sixteen, centre_mm: [{}, 0], clock: main}}\n",
                            i, 40 * (i % 200));
    }
    CHECK_THAT(message_of_change("detectors:\n", "detectors:\n" + many),
               Catch::Contains("a list of 1 to 4096"));
    CHECK_THAT(message_of_change("name: petrel", "name: " + std::string(5000, 'p')),
               Catch::Contains("at most 32 bytes"));
    CHECK_THAT(message_of_change("name: petrel", "x_deep: " + std::string(1000, '[')),
               !Catch::Equals("no error"));
    CHECK_THAT(message_of_change("name: petrel", "name: &a petrel"), Catch::Contains("an anchor"));
}

TEST_CASE("a camera file that is not there, or a pipe, is refused") {
    CHECK_THROWS_AS(load_camera("/nowhere/petrel.yaml"), InputError);
    CHECK_THROWS_AS(load_camera("/dev/null"), InputError);
    CHECK_THAT(message_of_change("format: straymark-camera/1", "format: straymark-camera/2"),
               Catch::Contains("update the program"));
}

TEST_CASE("the documentation's example is a good camera file") {
    const std::string page = contents(STRAYMARK_SOURCE "/docs/camera_file.md");
    const auto block = [&page](const std::string& opening) {
        const std::size_t begin = page.find(opening);
        REQUIRE(begin != std::string::npos);
        const std::size_t first = page.find('\n', begin) + 1;
        return page.substr(first, page.find("```", first) - first);
    };
    const TemporaryFolder folder;
    folder.write("small_amplifiers.csv", block("```csv\ndetector,"));
    const Camera camera =
        load_camera(folder.write("small.yaml", block("```yaml\nformat: straymark-camera/1")));
    CHECK(camera.detectors.size() == 1);
    CHECK(camera.detectors[0].amplifiers[1].read_noise_e == 6.1);
}

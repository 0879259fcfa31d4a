#pragma once

#include <map>
#include <optional>
#include <string>
#include <vector>

#include "camera/readout.h"
#include "core/frames.h"
#include "core/pixel_box.h"

/// The camera as its YAML file describes it (docs/camera_file.md): plain values, checked when read.

namespace straymark {

enum class Mount { altaz, equatorial };
enum class RowRead { transfer, in_place };
enum class DetectorRole { science, guide };
enum class AmplifierStatus { live, dead };
/// What an exposure is, by the value of the type keyword. `other`: no listed value matched.
enum class ExposureType { sky, dark, flat, focus, other };

struct Observatory {
    double latitude_deg = 0.0;   ///< -90..90, north positive
    double longitude_deg = 0.0;  ///< -180..360, east positive
    double height_m = 0.0;
};

struct Strut {
    double angle_deg = 0.0;  ///< on the sky from the tube's top, north through east
    double width_mm = 0.0;
    double inner_mm = 0.0;
    double outer_mm = 0.0;
};

struct Telescope {
    Mount mount = Mount::altaz;
    bool derotated = true;
    std::optional<std::string> pier_flipped;  ///< the header's value after a meridian flip
    double aperture_mm = 0.0;
    double obstruction_mm = 0.0;
    double focal_length_mm = 0.0;
    std::vector<Strut> struts;
};

/// psi = sign * header value + zero (docs/conventions.md); no keyword: psi = zero.
struct CameraAngle {
    std::optional<std::string> keyword;
    int sign = 1;
    double zero_deg = 0.0;
};

struct FocalPlane {
    double pixel_um = 0.0;
    int parity = 1;  ///< +1: as the eye sees the sky; -1: mirrored
    CameraAngle camera_angle;
    double k1 = 0.0;  ///< radial distortion, r = F t (1 + k1 t^2 + k2 t^4), t in radians
    double k2 = 0.0;
};

struct Filter {
    double wavelength_nm = 0.0;
    double width_nm = 0.0;
    double zero_point = 0.0;  ///< magnitude of 1 e-/s at airmass 1
    double extinction = 0.0;  ///< magnitudes per airmass
};

struct Amplifier {
    std::string id;
    ReadoutGeometry readout;
    std::string clock;   ///< the detector's, unless multiplexed
    std::string suffix;  ///< for keywords that carry one per amplifier in one header; may be empty
    double gain_e_per_adu = 0.0;
    double read_noise_e = 0.0;
    double saturation_adu = 0.0;  ///< raw, bias included
    std::optional<double> full_well_e;
    AmplifierStatus status = AmplifierStatus::live;
};

struct Detector {
    std::string id;
    int width = 0;
    int height = 0;
    FocalPoint centre;
    double rotation_deg = 0.0;
    bool flip = false;
    std::string board;
    DetectorRole role = DetectorRole::science;
    RowRead read = RowRead::transfer;
    SerialAxis serial = SerialAxis::x;
    std::vector<Amplifier> amplifiers;
};

/// An amplifier by its place in Camera::detectors and Detector::amplifiers.
struct AmplifierRef {
    int detector = 0;
    int amplifier = 0;
    friend auto operator<=>(const AmplifierRef&, const AmplifierRef&) = default;
};

/// One or two keywords that give an instant: a full date-time or MJD, or a date and a time of day.
struct StartKeywords {
    std::string date;
    std::optional<std::string> time;
};

/// Header keywords; empty optional: this camera has none.
struct HeaderKeywords {
    std::string id;
    std::optional<std::string> sequence, type;
    StartKeywords start;
    std::optional<std::string> end;
    std::string exposure;
    std::optional<std::string> clear, readout_end;
    std::string filter, ra, dec;
    std::optional<std::string> pier_side, temperature, mode;
};

enum class PixelOrder { unstated, readout, detector };

/// How raw files lay out pixels. `hdu` is a pattern for the EXTNAME of the image, or "primary". The
/// section entries name a keyword, or give a literal section when they begin with '['. In each of
/// them {detector}, {amplifier}, {suffix} and {number} are replaced (docs/camera_file.md).
struct RawLayout {
    std::string hdu;
    std::optional<std::string> data, bias, prescan, detector_section;
    PixelOrder order = PixelOrder::unstated;
};

struct Camera {
    std::string name;
    std::string path;    ///< of the file it was read from
    std::string digest;  ///< of that file and the tables it names
    Observatory observatory;
    Telescope telescope;
    FocalPlane focal_plane;
    std::map<std::string, Filter> filters;
    std::vector<Detector> detectors;
    double readout_s = 0.0;
    std::map<ExposureType, std::vector<std::string>> types;
    /// (source, victim) -> offset in ticks; positive: the echo comes later. Absent: 0.
    std::map<std::pair<AmplifierRef, AmplifierRef>, int> pair_offset_ticks;
    HeaderKeywords headers;
    RawLayout raw;

    [[nodiscard]] const Amplifier& amplifier(AmplifierRef ref) const {
        return detectors[static_cast<std::size_t>(ref.detector)]
            .amplifiers[static_cast<std::size_t>(ref.amplifier)];
    }
    /// "DETECTOR/AMPLIFIER", the name used in products and messages.
    [[nodiscard]] std::string amplifier_name(AmplifierRef ref) const;
    [[nodiscard]] std::optional<int> detector_index(const std::string& id) const;
    [[nodiscard]] std::optional<AmplifierRef> amplifier_ref(const std::string& full_name) const;
    /// All live amplifiers read in step with each other, by clock name.
    [[nodiscard]] std::map<std::string, std::vector<AmplifierRef>> clock_groups() const;
};

}  // namespace straymark

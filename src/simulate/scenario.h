#pragma once

#include <cstdint>
#include <map>
#include <string>
#include <vector>

#include "simulate/vectors.h"

/// What a simulated night is made from: the scenario file (docs/scenario_file.md) as plain values.
/// Places are given the way a builder would: the focal plane by positions and direction vectors,
/// a read-out by the pixel at its node and the steps from there.

namespace straymark::simulate {

/// Drawn evenly between the two.
struct Range {
    double low = 0.0;
    double high = 0.0;
};

struct SitePlan {
    double latitude_deg = 0.0;
    double longitude_deg = 0.0;  ///< east positive
    double height_m = 0.0;
};

struct StrutPlan {
    double angle_deg = 0.0;  ///< on the sky from the tube's top, north through east
    double width_mm = 0.0;
    double inner_mm = 0.0;
    double outer_mm = 0.0;
};

struct TelescopePlan {
    double focal_length_mm = 0.0;
    double aperture_mm = 0.0;
    double obstruction_mm = 0.0;
    std::vector<StrutPlan> struts;
    bool mirrored = false;  ///< an odd number of mirrors: the focal plane shows a mirrored sky
    double stretch_third_order = 0.0;  ///< radius = F t (1 + this t^2 + fifth order t^4)
    double stretch_fifth_order = 0.0;
    double pointing_error_arcsec = 0.0;   ///< 1 sigma per axis, of the header against the truth
    double camera_angle_error_deg = 0.0;  ///< 1 sigma, likewise
};

struct FilterPlan {
    double wavelength_nm = 0.0;
    double width_nm = 0.0;
    double zero_point = 0.0;  ///< magnitude of 1 e-/s at airmass 1
    double extinction = 0.0;  ///< magnitudes per airmass
};

/// A step on the detector, in pixels.
struct Step {
    int dx = 0;
    int dy = 0;
};

/// One amplifier: the pixel next to its node is clocked out first, then those `serial` on, row
/// after row `parallel` on.
struct ChannelPlan {
    std::string id;
    int node_x = 0;  ///< 0-based
    int node_y = 0;
    Step serial, parallel;
    int ticks = 0;  ///< data pixels in a row
    int rows = 0;
};

struct LayoutPlan {
    std::string name;
    int width = 0;
    int height = 0;
    int prescan_ticks = 0;   ///< before the first data pixel of a row
    int overscan_ticks = 0;  ///< after the last
    std::vector<ChannelPlan> channels;

    [[nodiscard]] int ticks_in_row(const ChannelPlan& channel) const {
        return prescan_ticks + channel.ticks + overscan_ticks;
    }
};

struct DetectorPlan {
    std::string id;
    int layout = 0;
    Vec2 centre_mm;      ///< of its pixels, from the rotator axis
    Vec2 column_vector;  ///< direction in which the column number grows; unit length
    Vec2 row_vector;     ///< direction in which the row number grows; unit length
    std::string clock;
    std::string board;
};

struct SiliconPlan {
    double pixel_um = 0.0;
    Range full_well_e;                   ///< drawn for each detector
    double pixel_response = 0.0;         ///< 1 sigma of a pixel's sensitivity about 1
    double cosmic_rays_per_cm2_s = 0.0;  ///< tracks
};

struct AmplifierPlan {
    Range gain_e_per_adu;
    Range read_noise_e;
    Range bias_adu;
    double bias_drift_adu = 0.0;  ///< amplitude of the slow drift along the rows
    int converter_max_adu = 65535;
};

/// How strongly the signals of one group of amplifiers leak into each other. Strengths are ratios
/// of the victim's level to the source's.
struct StratumPlan {
    Range strength;                 ///< magnitude, drawn evenly in its logarithm
    double fall_per_channel = 1.0;  ///< factor from one channel distance to the next
    double negative_fraction = 0.0;
    double zero_fraction = 0.0;
};

struct CouplingPlan {
    StratumPlan device, board, rest;
    double derivative_fraction = 0.0;  ///< of the pairs: echo has a part that follows the slope
    Range derivative_ratio;            ///< that part over the direct one
    double tail_fraction = 0.0;        ///< of the pairs: a slow part follows
    Range tail_ratio;                  ///< its sum over all ticks over the direct part
    double tail_decay = 0.25;          ///< from one tick to the next
    double delayed_fraction = 0.0;     ///< of the pairs: the echo comes whole ticks later
    int longest_delay_ticks = 1;
    double bent_fraction = 0.0;  ///< of the pairs: another slope above an onset
    Range bend_onset_adu;
    Range bend_ratio;  ///< far slope of the bending part over the direct one, may be negative
    double bend_width_adu = 8000.0;  ///< over which the slope turns
};

/// What a measurement of the coupling would know of it.
struct CharacterisationPlan {
    double error_floor = 2e-6;     ///< 1 sigma of a coefficient, at least
    double relative_error = 0.01;  ///< and at least this times the coefficient
};

struct FieldPlan {
    std::string name;
    double ra_deg = 0.0;  ///< centre of the list of bright stars
    double dec_deg = 0.0;
    std::string stars;              ///< file: ra_deg, dec_deg, vt_mag
    double stars_radius_deg = 0.0;  ///< around the centre, that the file covers
    double radius_deg = 0.0;        ///< around the centre, in which there are stars at all
    double complete_mag = 0.0;      ///< the file misses none brighter; fainter ones are made up
};

struct StarListPlan {
    double faintest_simulated_mag = 0.0;
    double faintest_listed_mag = 0.0;
    double position_error_arcsec = 0.0;  ///< 1 sigma per axis, of the list
    double magnitude_error = 0.0;        ///< 1 sigma, of the list
};

enum class ExposureKind { sky, dark, flat, focus };

struct ExposurePlan {
    std::string id;
    ExposureKind kind = ExposureKind::sky;
    double mjd = 0.0;  ///< shutter opens, UTC
    double exposure_s = 0.0;
    std::string filter;
    int field = -1;      ///< index; -1: none (dark, flat)
    Vec2 offset_arcsec;  ///< east, north of the field's centre
    double camera_angle_deg = 0.0;
    double seeing_arcsec = 0.0;    ///< full width at half maximum
    double sky_mag_arcsec2 = 0.0;  ///< brightness of the sky
    double flat_e = 0.0;           ///< charge of a flat
    double transparency = 1.0;
};

struct SeeingPlan {
    double moffat_beta = 3.0;
    double ellipticity = 0.0;  ///< 1 - minor / major axis
    double axis_deg = 0.0;     ///< of the major axis, from the focal +x axis
};

struct Scenario {
    std::string path;
    std::string name;  ///< of the camera
    std::uint64_t seed = 0;
    SitePlan site;
    TelescopePlan telescope;
    std::map<std::string, FilterPlan> filters;
    SeeingPlan seeing;
    SiliconPlan silicon;
    AmplifierPlan amplifiers;
    CouplingPlan coupling;
    CharacterisationPlan characterisation;
    double clear_s = 0.0;    ///< end of the last clear, before the shutter opens
    double readout_s = 0.0;  ///< closing to end of read-out
    std::vector<LayoutPlan> layouts;
    std::vector<DetectorPlan> detectors;
    StarListPlan star_list;
    std::vector<FieldPlan> fields;
    std::vector<ExposurePlan> exposures;
};

}  // namespace straymark::simulate

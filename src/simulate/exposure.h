#pragma once

#include <cstdint>
#include <vector>

#include "simulate/coupling.h"
#include "simulate/instrument.h"
#include "simulate/starfield.h"
#include "simulate/telescope.h"
#include "simulate/truth.h"

namespace straymark::simulate {

/// Where the telescope pointed, and where its header says it did.
struct Pointing {
    Vec3 ahead;
    double camera_angle_deg = 0.0;
    Equatorial header;
    double header_camera_angle_deg = 0.0;
};

/// The instants of an exposure, MJD UTC.
struct Instants {
    double clear = 0.0, start = 0.0, end = 0.0, readout_end = 0.0;
};

/// Side of the square on which the point-spread function is handed out, pixels.
inline constexpr int kSpreadSide = 41;

/// What only a simulation knows.
struct Truth {
    std::vector<Image> crosstalk_e;           ///< by detector: added by leaks
    std::vector<std::vector<double>> spread;  ///< by detector: kSpreadSide^2, centred, sum 1
    std::vector<Echo> echoes;
    std::vector<double> noise_e;  ///< by channel: sky and read noise of a pixel
};

struct SimulatedExposure {
    ExposurePlan plan;
    int number = 0;  ///< in the night, from 1
    Pointing pointing;
    Instants instants;
    double even_e = 0.0;  ///< sky or lamp in each pixel
    double lost_e = 0.0;  ///< charge of full columns
    /// By channel, in clock order: ticks of the first row (prescan and overscan included), and so
    /// on.
    std::vector<std::vector<std::uint16_t>> raw;
    Truth truth;
};

/// Everything that stays the same through the night.
struct World {
    const Scenario& scenario;
    Instrument instrument;
    Coupling coupling;
    std::vector<std::vector<SkyStar>> fields;
};

/// Makes exposure `index` of the scenario. Bit-identical for any number of threads. Throws
/// InputError where the scenario points below the horizon.
SimulatedExposure expose(const World& world, int index, int threads);

}  // namespace straymark::simulate

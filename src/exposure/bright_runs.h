#pragma once

#include <cstdint>

#include "exposure/bias.h"
#include "exposure/digest.h"
#include "exposure/plane.h"
#include "exposure/sky_mesh.h"

namespace straymark {

/// What a plane holds at a glance.
struct PixelCensus {
    std::int64_t valid = 0;      ///< pixels with a value
    std::int64_t saturated = 0;  ///< of these, at or above saturation
};

PixelCensus take_census(const AmplifierPlane& raw, float saturation_adu);

/// The smallest float that is not below `saturation_adu`, so that comparing raw floats with it is
/// comparing them with the number in the amplifier table.
float saturation_as_float(double saturation_adu);

/// Turns `plane` from raw ADU into signal above bias and local sky, and records in `digest` (whose
/// floor_adu is set) every pixel at or above the floor or saturated (runs, values), the saturated
/// spans and those without a value. Runs and spans are in read-out indices, by row, then tick, and
/// do not touch.
void subtract_and_collect(AmplifierPlane& plane, const BiasLevels& bias, const SkyMesh& sky,
                          float saturation_adu, AmplifierDigest& digest);

/// Sets the saturated pixels of `plane` to NaN: their values are not signal.
void blank_saturated(AmplifierPlane& plane, const AmplifierDigest& digest);

}  // namespace straymark

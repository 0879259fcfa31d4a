#pragma once

#include <vector>

#include "exposure/bias.h"
#include "exposure/plane.h"

namespace straymark {

/// The sky of one amplifier: levels above bias at the centres of a coarse mesh of cells, linear in
/// between and beyond. Large halos and gradients are sky; what is smaller than a cell is not.
class SkyMesh {
public:
    /// levels: rows * columns, row by row.
    SkyMesh(int ticks, int plane_rows, int columns, int rows, std::vector<float> levels);

    [[nodiscard]] double at(double tick, double row) const;
    /// Sky of every pixel of row r of the plane.
    void fill_row(int r, float* out) const;
    [[nodiscard]] double mean() const;

private:
    /// Levels along row r at the columns' centres.
    [[nodiscard]] float node(int column, double row) const;

    double cell_ticks_, cell_rows_;
    int ticks_, columns_, rows_;
    std::vector<float> levels_;
};

/// Sky and its noise. count: pixels sampled that have a value; saturated pixels are left out.
struct SkyLevels {
    SkyMesh mesh;
    double noise_adu = 0.0;  ///< of one pixel about the mesh: sky and read noise, no stars
    bool constant = false;   ///< all sampled raw pixels are equal
};

/// Measures the sky of a plane of *raw* pixels from a fixed sample of them. Pixels at or above
/// `saturation_adu` and NaN are left out. Cells that hold mostly such pixels, or stand out from
/// what their neighbours let expect, take the latter.
SkyLevels measure_sky(const AmplifierPlane& raw, const BiasLevels& bias, float saturation_adu);

}  // namespace straymark

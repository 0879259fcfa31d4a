#include "exposure/sky_mesh.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <numeric>
#include <optional>
#include <span>

#include "core/robust.h"

namespace straymark {
namespace {

constexpr int kCellPixels = 128;
/// Pixels sampled in each cell, at most about: the level's error is then 5 % of the noise.
constexpr int kCellSample = 512;
/// Reach of a cell's mean about its median, in units of the noise; at 2 a few per cent of stars
/// move the mean by less than its error.
constexpr double kCellClip = 2.0;
/// A cell with fewer valid samples than this fraction says nothing.
constexpr double kLeastValid = 0.25;
/// A cell this far from what its neighbours let expect, in units of the noise, holds an object.
constexpr double kOutlierNoise = 0.3;
/// Pixels sampled for the noise: its error is then under 1 %.
constexpr int kNoiseSample = 16384;
/// Differences of neighbours forget sources and gradients; the noise about the mesh is replaced by
/// theirs where it is larger by more than this factor (crowded fields, unmodelled structure).
constexpr double kExcess = 1.15;
constexpr float kNaN = std::numeric_limits<float>::quiet_NaN();

struct Grid {
    int columns = 1;
    int rows = 1;
    std::vector<float> levels;
};

int cells_along(int pixels) {
    return std::max(1, (pixels + kCellPixels / 2) / kCellPixels);
}

/// Valid samples of the cell, above bias.
void sample_cell(const AmplifierPlane& raw, const BiasLevels& bias, float saturation_adu,
                 const PixelBox& cell, int step, std::vector<float>& out) {
    out.clear();
    for (int r = cell.y0; r < cell.y1; r += step) {
        const float* row = raw.row(r);
        // The start moves from row to row, so that no column pattern is sampled as one phase.
        const int start = cell.x0 + (r / step) * 3 % step;
        for (int t = start; t < cell.x1; t += step) {
            if (row[t] < saturation_adu) {  // false for NaN
                out.push_back(row[t] - bias.rows[r]);
            }
        }
    }
}

/// Level of a cell's sample, which it reorders: the mean of what lies within `reach` of the median.
float cell_level(std::vector<float>& sample, float reach) {
    const auto middle = sample.begin() + static_cast<std::ptrdiff_t>(sample.size() / 2);
    std::nth_element(sample.begin(), middle, sample.end());
    const float median = *middle;
    float sum = 0.0F;
    float count = 0.0F;
    for (const float value : sample) {
        const float weight = std::abs(value - median) <= reach ? 1.0F : 0.0F;
        sum += weight * (value - median);
        count += weight;
    }
    return median + sum / count;
}

Grid measure_cells(const AmplifierPlane& raw, const BiasLevels& bias, float saturation_adu,
                   double noise) {
    Grid grid{cells_along(raw.ticks), cells_along(raw.rows), {}};
    const auto reach = static_cast<float>(kCellClip * noise);
    std::vector<float> sample;
    for (int j = 0; j < grid.rows; ++j) {
        for (int i = 0; i < grid.columns; ++i) {
            const PixelBox cell{raw.ticks * i / grid.columns, raw.rows * j / grid.rows,
                                raw.ticks * (i + 1) / grid.columns, raw.rows * (j + 1) / grid.rows};
            const int pixels = cell.width() * cell.height();
            const int step = std::max(1, static_cast<int>(std::sqrt(pixels / double(kCellSample))));
            sample_cell(raw, bias, saturation_adu, cell, step, sample);
            const double valid = double(sample.size()) * step * step / pixels;
            grid.levels.push_back(valid < kLeastValid ? kNaN : cell_level(sample, reach));
        }
    }
    return grid;
}

/// What the cells around (i, j) let expect there: the median, over the four directions, of the mean
/// of the two cells to either side, or of the line through the two on one side (at an edge): exact
/// for a gradient. Nothing where no direction has two finite cells.
std::optional<float> expected_level(const Grid& grid, int i, int j) {
    const auto level = [&grid](int x, int y) {
        const bool inside = x >= 0 && x < grid.columns && y >= 0 && y < grid.rows;
        return inside ? grid.levels[y * grid.columns + x] : kNaN;
    };
    constexpr std::array<std::array<int, 2>, 4> kDirections{{{1, 0}, {0, 1}, {1, 1}, {1, -1}}};
    std::vector<float> guesses;
    for (const auto& [dx, dy] : kDirections) {
        const float before = level(i - dx, j - dy);
        const float after = level(i + dx, j + dy);
        for (const float guess :
             {0.5F * (before + after), 2.0F * before - level(i - 2 * dx, j - 2 * dy),
              2.0F * after - level(i + 2 * dx, j + 2 * dy)}) {
            if (std::isfinite(guess)) {
                guesses.push_back(guess);
                break;
            }
        }
    }
    if (guesses.empty()) {
        return std::nullopt;
    }
    return static_cast<float>(median_in_place(std::span<float>(guesses)));
}

/// Cells that stand out take what their neighbours let expect; empty ones too, or else the median.
void replace_outliers(Grid& grid, double noise) {
    std::vector<float> finite;
    std::copy_if(grid.levels.begin(), grid.levels.end(), std::back_inserter(finite),
                 [](float v) { return std::isfinite(v); });
    const float median =
        finite.empty() ? 0.0F : static_cast<float>(median_in_place(std::span<float>(finite)));
    const Grid measured = grid;
    for (int j = 0; j < grid.rows; ++j) {
        for (int i = 0; i < grid.columns; ++i) {
            float& level = grid.levels[j * grid.columns + i];
            const float expected =
                expected_level(measured, i, j).value_or(std::isfinite(level) ? level : median);
            if (!(std::abs(level - expected) <= kOutlierNoise * noise)) {
                level = expected;
            }
        }
    }
}

/// Calls use(tick, row) for about kNoiseSample pixels spread over the plane, row by row, never the
/// last tick.
template <typename Use>
void for_sample(const AmplifierPlane& plane, const Use& use) {
    const double pixels = double(plane.ticks) * plane.rows;
    const int step = std::max(1, static_cast<int>(std::sqrt(pixels / kNoiseSample)));
    for (int r = step / 2; r < plane.rows; r += step) {
        for (int t = (r / step) * 5 % step; t + 1 < plane.ticks; t += step) {
            use(t, r);
        }
    }
}

/// Noise from differences of horizontal neighbours, free of any structure that is smooth.
double difference_noise(const AmplifierPlane& raw, float saturation_adu) {
    std::vector<float> sample;
    for_sample(raw, [&](int t, int r) {
        const float a = raw.at(t, r);
        const float b = raw.at(t + 1, r);
        if (a < saturation_adu && b < saturation_adu) {
            sample.push_back(a - b);
        }
    });
    return sample.empty() ? 0.0 : clipped_normal(sample).scale / std::sqrt(2.0);
}

double mesh_noise(const AmplifierPlane& raw, const BiasLevels& bias, const SkyMesh& mesh,
                  float saturation_adu) {
    std::vector<float> sample;
    std::vector<float> pedestal(static_cast<std::size_t>(raw.ticks));
    int filled = -1;
    for_sample(raw, [&](int t, int r) {
        if (r != filled) {
            mesh.fill_row(r, pedestal.data());
            filled = r;
        }
        const float value = raw.at(t, r);
        if (value < saturation_adu) {
            sample.push_back(value - bias.rows[r] - pedestal[t]);
        }
    });
    return sample.empty() ? 0.0 : clipped_normal(sample).scale;
}

bool is_constant(const AmplifierPlane& raw, float saturation_adu) {
    float low = std::numeric_limits<float>::infinity();
    float high = -low;
    for_sample(raw, [&](int t, int r) {
        const float value = raw.at(t, r);
        if (value < saturation_adu) {
            low = std::min(low, value);
            high = std::max(high, value);
        }
    });
    return low >= high;
}

}  // namespace

SkyMesh::SkyMesh(int ticks, int plane_rows, int columns, int rows, std::vector<float> levels)
    : cell_ticks_(double(ticks) / columns),
      cell_rows_(double(plane_rows) / rows),
      ticks_(ticks),
      columns_(columns),
      rows_(rows),
      levels_(std::move(levels)) {}

float SkyMesh::node(int column, double row) const {
    const double v = (row + 0.5) / cell_rows_ - 0.5;
    const int j = std::clamp(static_cast<int>(std::floor(v)), 0, std::max(0, rows_ - 2));
    const float below = levels_[j * columns_ + column];
    const float above = rows_ > 1 ? levels_[(j + 1) * columns_ + column] : below;
    return static_cast<float>(below + (v - j) * (above - below));
}

double SkyMesh::at(double tick, double row) const {
    const double u = (tick + 0.5) / cell_ticks_ - 0.5;
    const int i = std::clamp(static_cast<int>(std::floor(u)), 0, std::max(0, columns_ - 2));
    const double left = node(i, row);
    const double right = columns_ > 1 ? node(i + 1, row) : left;
    return left + (u - i) * (right - left);
}

void SkyMesh::fill_row(int r, float* out) const {
    int t = 0;
    for (int i = 0; t < ticks_; ++i) {
        // The last segment reaches to the end, as `at` extrapolates it.
        const bool last = i + 2 >= columns_;
        const int end = last ? ticks_ : static_cast<int>(std::ceil((i + 1.5) * cell_ticks_ - 0.5));
        const float left = node(i, r);
        const float right = columns_ > 1 ? node(i + 1, r) : left;
        const auto slope = static_cast<float>((right - left) / cell_ticks_);
        const auto start = static_cast<float>(left + slope * (0.5 - (i + 0.5) * cell_ticks_));
        for (; t < end; ++t) {
            out[t] = start + slope * static_cast<float>(t);
        }
    }
}

double SkyMesh::mean() const {
    return std::accumulate(levels_.begin(), levels_.end(), 0.0) / double(levels_.size());
}

SkyLevels measure_sky(const AmplifierPlane& raw, const BiasLevels& bias, float saturation_adu) {
    const double from_differences = difference_noise(raw, saturation_adu);
    Grid grid = measure_cells(raw, bias, saturation_adu, from_differences);
    replace_outliers(grid, from_differences);
    SkyLevels sky{SkyMesh(raw.ticks, raw.rows, grid.columns, grid.rows, std::move(grid.levels)),
                  0.0, is_constant(raw, saturation_adu)};
    const double about_mesh = mesh_noise(raw, bias, sky.mesh, saturation_adu);
    sky.noise_adu = about_mesh > kExcess * from_differences ? from_differences : about_mesh;
    return sky;
}

}  // namespace straymark

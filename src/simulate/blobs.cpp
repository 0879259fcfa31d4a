#include "simulate/blobs.h"

#include <algorithm>
#include <tuple>

namespace straymark::simulate {

std::vector<Blob> find_blobs(const Channel& channel, const Image& excess, float least_e) {
    std::vector<bool> open(static_cast<std::size_t>(channel.rows) * channel.ticks, false);
    const auto at = [&](int row, int tick) {
        return static_cast<std::size_t>(row) * channel.ticks + tick;
    };
    const auto charge = [&](int row, int tick) { return excess[channel.pixel(tick, row)]; };
    for (int row = 0; row < channel.rows; ++row) {
        for (int tick = 0; tick < channel.ticks; ++tick) {
            open[at(row, tick)] = charge(row, tick) > least_e;
        }
    }
    std::vector<Blob> blobs;
    std::vector<ClockedPixel> stack;
    const auto take = [&](int row, int tick) {
        if (row >= 0 && row < channel.rows && tick >= 0 && tick < channel.ticks &&
            open[at(row, tick)]) {
            open[at(row, tick)] = false;
            stack.push_back({row, tick, charge(row, tick)});
        }
    };
    for (int row = 0; row < channel.rows; ++row) {
        for (int tick = 0; tick < channel.ticks; ++tick) {
            take(row, tick);
            if (stack.empty()) {
                continue;
            }
            Blob& blob = blobs.emplace_back();
            while (!stack.empty()) {
                const ClockedPixel pixel = stack.back();
                stack.pop_back();
                blob.push_back(pixel);
                for (int dr = -1; dr <= 1; ++dr) {
                    for (int dt = -1; dt <= 1; ++dt) {
                        take(pixel.row + dr, pixel.tick + dt);
                    }
                }
            }
            std::sort(blob.begin(), blob.end(), [](const ClockedPixel& a, const ClockedPixel& b) {
                return std::tie(a.row, a.tick) < std::tie(b.row, b.tick);
            });
        }
    }
    return blobs;
}

}  // namespace straymark::simulate

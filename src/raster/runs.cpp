#include "raster/runs.h"

#include <algorithm>
#include <cassert>
#include <cmath>

namespace straymark {

void normalize_runs(std::vector<PixelRun>& runs) {
    std::erase_if(runs, [](const PixelRun& run) { return run.length <= 0; });
    std::sort(runs.begin(), runs.end(), [](const PixelRun& a, const PixelRun& b) {
        return a.y != b.y ? a.y < b.y : a.x0 < b.x0;
    });
    std::size_t kept = 0;
    for (const PixelRun& run : runs) {
        if (kept > 0 && runs[kept - 1].y == run.y &&
            run.x0 <= runs[kept - 1].x0 + runs[kept - 1].length) {
            PixelRun& last = runs[kept - 1];
            last.length = std::max(last.length, run.x0 + run.length - last.x0);
        } else {
            runs[kept++] = run;
        }
    }
    runs.resize(kept);
}

std::vector<PixelRun> dilated(const std::vector<PixelRun>& runs, double radius,
                              const PixelBox& bounds) {
    assert(radius >= 0.0);
    std::vector<PixelRun> grown;
    const int reach = static_cast<int>(std::floor(radius));
    for (const PixelRun& run : runs) {
        for (int dy = -reach; dy <= reach; ++dy) {
            const int y = run.y + dy;
            if (run.length <= 0 || y < bounds.y0 || y >= bounds.y1) {
                continue;
            }
            const int half_chord =
                static_cast<int>(std::floor(std::sqrt(radius * radius - double(dy) * double(dy))));
            const int x0 = std::max(run.x0 - half_chord, bounds.x0);
            const int x1 = std::min(run.x0 + run.length + half_chord, bounds.x1);
            grown.push_back({y, x0, x1 - x0});
        }
    }
    normalize_runs(grown);
    return grown;
}

}  // namespace straymark

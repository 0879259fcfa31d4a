#include "io/defects_file.h"

#include <fmt/format.h>

#include "core/error.h"
#include "io/csv.h"

namespace straymark::io {

std::map<int, std::vector<PixelBox>> load_defects(const std::string& path, const Camera& camera) {
    constexpr int kMostRows = 1000000;
    CsvReader table(path);
    const int detector_column = table.required_column("detector");
    const int x1 = table.required_column("x1");
    const int x2 = table.required_column("x2");
    const int y1 = table.required_column("y1");
    const int y2 = table.required_column("y2");
    std::map<std::string, int, std::less<>> index;
    for (std::size_t i = 0; i < camera.detectors.size(); ++i) {
        index.emplace(camera.detectors[i].id, static_cast<int>(i));
    }

    std::map<int, std::vector<PixelBox>> defects;
    const auto end_in = [&table](int column, int least, int most) {
        const int value = table.integer(column);
        if (value < least || value > most) {
            table.refuse(column, fmt::format("a pixel from {} to {}", least, most));
        }
        return value;
    };
    for (int rows = 0; table.next(); ++rows) {
        if (rows == kMostRows) {
            throw InputError({path, fmt::format("line {}", table.line()),
                              fmt::format("over {} rows", kMostRows), "a shorter list",
                              "join neighbouring pixels into boxes"});
        }
        const auto found = index.find(table.field(detector_column));
        if (found == index.end()) {
            table.refuse(detector_column, fmt::format("a detector of camera {}", camera.name));
        }
        const Detector& detector = camera.detectors[static_cast<std::size_t>(found->second)];
        const int left = end_in(x1, 1, detector.width);
        const int right = end_in(x2, left, detector.width);
        const int bottom = end_in(y1, 1, detector.height);
        const int top = end_in(y2, bottom, detector.height);
        defects[found->second].push_back({left - 1, bottom - 1, right, top});
    }
    return defects;
}

}  // namespace straymark::io

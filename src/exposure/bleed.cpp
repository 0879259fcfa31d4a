#include "exposure/bleed.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <map>

#include "exposure/signal_lookup.h"
#include "raster/components.h"
#include "raster/runs.h"

// All geometry here is laid out with rows along u and columns (the direction of charge transfer)
// along v, whatever the detector's serial axis: a PixelRun's x0 is a u, its y a v.

namespace straymark {
namespace {

/// A core may be this much longer along its column than along its row (elongated images) ...
constexpr double kCoreStretch = 1.25;
/// ... and always by this many pixels (sampling).
constexpr double kCoreMargin = 2.0;
/// A row of a trail this much broader than the narrowest so far belongs to another star's core.
constexpr double kSecondCoreRatio = 1.5;
constexpr double kSecondCoreMargin = 3.0;
/// Cores looked for in one blob; more are not stars but a saturated field.
constexpr std::size_t kMostCores = 32;
/// The run-out of a trail ends where a pixel is no more than this factor, and this many noises,
/// above what the star alone explains, or rises above its predecessor by as much.
constexpr double kRunOutFactor = 1.25;
constexpr double kRunOutNoise = 5.0;
/// Distances of the columns beside a trail that show what is there without it.
constexpr std::array<int, 3> kBeside{2, 3, 4};

/// One row of a blob: its longest saturated run.
struct Breadth {
    int v = 0;
    int u0 = 0;
    int length = 0;
    double roundness = 0.0;  ///< diameter of the disc that this row could be the middle of
};

struct Core {
    double u = 0.0;
    double v = 0.0;
    double radius = 0.0;

    /// Is a round star enough to saturate this pixel?
    [[nodiscard]] bool explains(int pixel_u, int pixel_v) const {
        const double du = (pixel_u - u) / (radius + 1.0);
        const double dv = (pixel_v - v) / reach();
        return du * du + dv * dv <= 1.0;
    }
    [[nodiscard]] double reach() const {
        return std::max(kCoreStretch * radius, radius + kCoreMargin);
    }
};

/// Trail pixels of one column of one blob.
struct Column {
    int u = 0;
    int lowest = std::numeric_limits<int>::max();
    int highest = std::numeric_limits<int>::min();
};

/// Adds one pixel to a list of runs that grows row by row.
void append_pixel(std::vector<PixelRun>& runs, int u, int v) {
    if (!runs.empty() && runs.back().y == v && runs.back().x0 + runs.back().length == u) {
        ++runs.back().length;
    } else {
        runs.push_back({v, u, 1});
    }
}

std::vector<Breadth> breadths_of(const std::vector<PixelRun>& blob) {
    std::vector<Breadth> breadths;
    for (const PixelRun& run : blob) {
        if (breadths.empty() || breadths.back().v != run.y) {
            breadths.push_back({run.y, run.x0, run.length, 0.0});
        } else if (run.length > breadths.back().length) {
            breadths.back() = {run.y, run.x0, run.length, 0.0};
        }
    }
    // A disc of diameter w has sqrt(3)/2 w rows that are at least w/2 broad. A long row without
    // such company (charge that spilled along the serial register) is not the middle of a disc.
    const int count = static_cast<int>(breadths.size());
    for (int k = 0; k < count; ++k) {
        const int half = breadths[k].length / 2;
        int low = k;
        int high = k;
        while (low > 0 && k - low < breadths[k].length && breadths[low - 1].length >= half) {
            --low;
        }
        while (high + 1 < count && high - k < breadths[k].length &&
               breadths[high + 1].length >= half) {
            ++high;
        }
        breadths[k].roundness =
            std::min(double(breadths[k].length), (high - low + 1) * 2.0 / std::sqrt(3.0));
    }
    return breadths;
}

/// The core whose middle row is the roundest of [begin, end).
Core core_in(const std::vector<Breadth>& breadths, int begin, int end) {
    int best = begin;
    for (int k = begin; k < end; ++k) {
        if (breadths[k].roundness > breadths[best].roundness) {
            best = k;
        }
    }
    // The middle of all rows about as broad: the middle of a disc, and of a trail as broad as it.
    int low = best;
    int high = best;
    const double broad = 0.8 * breadths[best].length;
    while (low > begin && breadths[low - 1].length >= broad) {
        --low;
    }
    while (high + 1 < end && breadths[high + 1].length >= broad) {
        ++high;
    }
    const Breadth& middle = breadths[(low + high) / 2];
    return {middle.u0 + 0.5 * (middle.length - 1), 0.5 * (breadths[low].v + breadths[high].v),
            0.5 * breadths[best].roundness};
}

/// Follows a trail from row `from` in steps of `step` and adds the cores of other stars on it.
void add_cores_along(const std::vector<Breadth>& breadths, int from, int step,
                     std::vector<Core>& cores) {
    const int count = static_cast<int>(breadths.size());
    double narrowest = std::numeric_limits<double>::infinity();
    for (int k = from; k >= 0 && k < count && cores.size() < kMostCores; k += step) {
        const double breadth = breadths[k].roundness;
        if (breadth <= kSecondCoreRatio * narrowest + kSecondCoreMargin) {
            narrowest = std::min(narrowest, breadth);
            continue;
        }
        int beyond = k;  // all rows that stand out
        while (beyond >= 0 && beyond < count &&
               breadths[beyond].roundness > kSecondCoreRatio * narrowest + kSecondCoreMargin) {
            beyond += step;
        }
        cores.push_back(core_in(breadths, std::min(k, beyond + 1), std::max(k + 1, beyond)));
        // Its outskirts taper down to the trail again.
        k = beyond + step * static_cast<int>(cores.back().reach() / 2.0);
    }
}

std::vector<Core> find_cores(const std::vector<Breadth>& breadths) {
    const int count = static_cast<int>(breadths.size());
    std::vector<Core> cores{core_in(breadths, 0, count)};
    const int first_v = breadths.front().v;
    const Core first = cores.front();
    add_cores_along(breadths, static_cast<int>(std::ceil(first.v + first.reach())) - first_v, 1,
                    cores);
    add_cores_along(breadths, static_cast<int>(std::floor(first.v - first.reach())) - first_v, -1,
                    cores);
    return cores;
}

const Core& nearest_core(const std::vector<Core>& cores, int u, int v) {
    const auto distance = [u, v](const Core& core) { return std::hypot(core.u - u, core.v - v); };
    return *std::min_element(cores.begin(), cores.end(), [&](const Core& a, const Core& b) {
        return distance(a) < distance(b);
    });
}

/// Follows the trails of one blob beyond their saturated ends.
class RunOut {
public:
    RunOut(bool serial_y, const SignalLookup& signal, const std::vector<Core>& cores)
        : serial_y_(serial_y), signal_(signal), cores_(cores) {}

    /// Adds the run-out of `columns`, neighbours all, to `bleed`.
    void follow(const std::vector<Column>& columns, std::vector<PixelRun>& bleed) const {
        for (const Column& column : columns) {
            for (const int step : {-1, 1}) {
                const int end = step < 0 ? column.lowest : column.highest;
                const Core& core = nearest_core(cores_, column.u, end);
                if ((end - core.v) * step < 0.0) {
                    continue;  // this end of the column is still within the star
                }
                follow(column.u, end, step, columns.front().u, columns.back().u, core, bleed);
            }
        }
    }

private:
    [[nodiscard]] SignalLookup::Pixel at(int u, int v) const {
        return signal_.at(serial_y_ ? DetectorPixel{v, u} : DetectorPixel{u, v});
    }

    void follow(int u, int end, int step, int first_u, int last_u, const Core& core,
                std::vector<PixelRun>& bleed) const {
        double previous = at(u, end).signal_e;
        for (int v = end + step;; v += step) {
            const SignalLookup::Pixel pixel = at(u, v);
            const double margin = kRunOutNoise * pixel.noise_e;
            const double star = std::max(beside(first_u, last_u, v), along_row(core, v));
            if (!pixel.on_detector || pixel.signal_e <= kRunOutFactor * star + margin ||
                pixel.signal_e > kRunOutFactor * previous + margin) {
                return;
            }
            append_pixel(bleed, u, v);
            previous = pixel.signal_e;
        }
    }

    /// What was not kept lies anywhere up to the floor.
    static double expected_of(const SignalLookup::Pixel& pixel) {
        return std::max(pixel.signal_e, 0.5 * pixel.floor_e);
    }

    /// Median signal of the columns beside the trail [first_u, last_u] in row v.
    [[nodiscard]] double beside(int first_u, int last_u, int v) const {
        std::array<double, 2 * kBeside.size()> values{};
        std::size_t count = 0;
        for (const int distance : kBeside) {
            for (const int u : {first_u - distance, last_u + distance}) {
                const SignalLookup::Pixel pixel = at(u, v);
                if (pixel.on_detector) {
                    values[count++] = expected_of(pixel);
                }
            }
        }
        if (count == 0) {
            return 0.0;
        }
        const auto middle = values.begin() + static_cast<std::ptrdiff_t>(count / 2);
        std::nth_element(values.begin(), middle,
                         values.begin() + static_cast<std::ptrdiff_t>(count));
        return *middle;
    }

    /// What the star shows at the same distance along its row: the fainter side, as the other may
    /// hold another star.
    [[nodiscard]] double along_row(const Core& core, int v) const {
        const double distance = std::abs(v - core.v);
        double star = std::numeric_limits<double>::infinity();
        for (const double u : {core.u - distance, core.u + distance}) {
            const SignalLookup::Pixel pixel =
                at(static_cast<int>(std::lround(u)), static_cast<int>(std::lround(core.v)));
            if (pixel.on_detector) {
                star = std::min(star, expected_of(pixel));
            }
        }
        return std::isfinite(star) ? star : 0.0;
    }

    bool serial_y_;
    const SignalLookup& signal_;
    const std::vector<Core>& cores_;
};

/// The saturated pixels of the whole detector.
std::vector<PixelRun> saturated_runs(const Detector& detector,
                                     const std::vector<AmplifierDigest>& amplifiers) {
    const bool serial_y = detector.serial == SerialAxis::y;
    std::vector<PixelRun> runs;
    for (std::size_t a = 0; a < amplifiers.size(); ++a) {
        if (amplifiers[a].state != AmplifierState::ok) {
            continue;
        }
        const ReadoutGeometry& readout = detector.amplifiers[a].readout;
        for (const ReadoutSpan& span : amplifiers[a].saturated) {
            const DetectorPixel first = readout.detector_from_readout({span.tick, span.row});
            const DetectorPixel last =
                readout.detector_from_readout({span.tick + span.length - 1, span.row});
            runs.push_back(serial_y ? PixelRun{first.x, std::min(first.y, last.y), span.length}
                                    : PixelRun{first.y, std::min(first.x, last.x), span.length});
        }
    }
    normalize_runs(runs);
    return runs;
}

std::vector<std::vector<PixelRun>> blobs_of(const std::vector<PixelRun>& runs) {
    const RunComponents components = connected_components(runs);
    std::vector<std::vector<PixelRun>> blobs(static_cast<std::size_t>(components.count));
    for (std::size_t k = 0; k < runs.size(); ++k) {
        blobs[components.label[k]].push_back(runs[k]);
    }
    return blobs;
}

/// Adds the trail pixels of one blob to `bleed` and returns them by column, in order of u.
std::vector<Column> add_trails(const std::vector<PixelRun>& blob, const std::vector<Core>& cores,
                               std::vector<PixelRun>& bleed) {
    std::map<int, Column> columns;
    for (const PixelRun& run : blob) {
        for (int u = run.x0; u < run.x0 + run.length; ++u) {
            if (std::any_of(cores.begin(), cores.end(),
                            [&](const Core& core) { return core.explains(u, run.y); })) {
                continue;
            }
            append_pixel(bleed, u, run.y);
            Column& column = columns[u];
            column.u = u;
            column.lowest = std::min(column.lowest, run.y);
            column.highest = std::max(column.highest, run.y);
        }
    }
    std::vector<Column> ordered;
    ordered.reserve(columns.size());
    for (const auto& [u, column] : columns) {
        ordered.push_back(column);
    }
    return ordered;
}

void add_bleed(bool serial_y, const std::vector<PixelRun>& blob, const SignalLookup& signal,
               std::vector<PixelRun>& bleed) {
    const std::vector<Core> cores = find_cores(breadths_of(blob));
    const std::vector<Column> columns = add_trails(blob, cores, bleed);
    const RunOut run_out(serial_y, signal, cores);
    for (auto first = columns.begin(); first != columns.end();) {
        const auto last = std::adjacent_find(
            first, columns.end(), [](const Column& a, const Column& b) { return b.u > a.u + 1; });
        const auto end = last == columns.end() ? last : std::next(last);
        run_out.follow({first, end}, bleed);
        first = end;
    }
}

}  // namespace

std::vector<PixelRun> find_bleed(const Detector& detector,
                                 const std::vector<AmplifierDigest>& amplifiers) {
    const bool serial_y = detector.serial == SerialAxis::y;
    const SignalLookup signal(detector, amplifiers);
    std::vector<PixelRun> bleed;
    for (const auto& blob : blobs_of(saturated_runs(detector, amplifiers))) {
        add_bleed(serial_y, blob, signal, bleed);
    }
    normalize_runs(bleed);
    if (!serial_y) {
        return bleed;
    }
    std::vector<PixelRun> turned;
    for (const PixelRun& run : bleed) {
        for (int u = run.x0; u < run.x0 + run.length; ++u) {
            turned.push_back({u, run.y, 1});
        }
    }
    normalize_runs(turned);
    return turned;
}

}  // namespace straymark

#pragma once

#include <span>
#include <utility>
#include <vector>

#include "artifacts/mark.h"
#include "mask/bits.h"
#include "mask/kernel.h"

namespace straymark {

/// Noise of the pixels of one amplifier, template included, electrons; 0: not known.
struct NoisePatch {
    PixelBox section;
    double noise_e = 0.0;
};

/// What one tile of a detector came to, for one artifact.
struct TileCounts {
    std::int64_t flagged = 0;
    std::int64_t marginal = 0;
    std::int64_t unassessed = 0;

    TileCounts& operator+=(const TileCounts& other) {
        flagged += other.flagged;
        marginal += other.marginal;
        unassessed += other.unassessed;
        return *this;
    }
};

/// What to compare with, and which bits to set where.
struct PaintRule {
    double threshold = 1.0;
    ArtifactBits bits;
    std::span<MaskPixel> mask;  ///< of the whole detector, row by row
};

/// Applies the decision rule to one tile at a time. Keeps its buffers from tile to tile; one worker
/// for each thread.
class TileWorker {
public:
    /// whole: the detector's pixels. The kernel must outlive the worker.
    TileWorker(const DetectionKernel& kernel, PixelBox whole, std::vector<NoisePatch> noise);

    /// Sets the bits of one artifact over `tile`. marks: all that could reach the tile.
    TileCounts paint(const PixelBox& tile, std::span<const Mark* const> marks,
                     const FaintSum* faint, const PaintRule& rule);

private:
    /// One rendered signal: a mark's own, or one of its error modes.
    struct Rendered {
        PixelBox box;
        std::size_t first = 0;  ///< into pool_
    };
    struct RenderedMode {
        std::uint64_t group = 0;
        bool measured = true;
        double relative = 1.0;
        std::size_t rendered = 0;  ///< into rendered_
    };
    /// A sum over all marks in the tile's reach, and its filter answer over the tile.
    struct Layer {
        std::vector<float> signal, answer;
        SignalWindow in, out;
    };
    struct Decision {
        bool flagged = false, negative = false, marginal = false, unassessed = false;
    };

    void reset(const PixelBox& tile, bool any_unmeasured);
    void add_faint(const FaintSum& faint);
    void render_marks(std::span<const Mark* const> marks);
    std::size_t render(const SignalShape& shape);
    void add(const Rendered& rendered, Layer& layer, float scale, bool magnitude);
    [[nodiscard]] double quietest_noise() const;
    [[nodiscard]] bool could_matter(double threshold, double quietest_noise_e) const;
    void answer_all(double threshold, double quietest_noise_e);
    TileCounts paint_patch(const NoisePatch& patch, const PaintRule& rule) const;
    void paint_stretch(int x0, int x1, int y, double scale, const PaintRule& rule,
                       TileCounts& counts) const;
    [[nodiscard]] bool stretch_could_matter(int x0, int x1, int y, float limit) const;
    [[nodiscard]] Decision decide_pixel(int x, int y, double scale, double threshold) const;
    /// error_bound: at least one sigma of the response here.
    [[nodiscard]] Decision decide_exactly(int x, int y, double scale, double threshold,
                                          double error_bound) const;
    /// Squared one-sigma answers at a pixel, measured and unmeasured.
    [[nodiscard]] std::pair<double, double> variances_at(int x, int y) const;
    [[nodiscard]] SignalWindow window(const Rendered& rendered) const;

    const DetectionKernel& kernel_;
    PixelBox whole_;
    std::vector<NoisePatch> noise_;

    PixelBox tile_, reach_;
    bool any_unmeasured_ = false;
    Layer measured_, unmeasured_;              ///< signals
    Layer measured_faint_, unmeasured_faint_;  ///< one sigma of the faint sum
    Layer spread_;                             ///< at least one sigma: linear sum of all errors
    std::vector<float> pool_, scratch_;
    std::vector<Rendered> rendered_;
    std::vector<RenderedMode> modes_;
};

}  // namespace straymark

#pragma once

#include <memory>
#include <vector>

#include "artifacts/crosstalk/params.h"
#include "artifacts/crosstalk/sources.h"
#include "artifacts/mark.h"
#include "camera/readout.h"

namespace straymark::crosstalk {

/// What multiplies a source's pixels to give its echo, in victim electrons per source ADU:
/// an unclipped pixel S echoes linear * S + bend_scale * bend(S) at its own tick, a clipped one
/// clipped_linear * S + clipped_bend_scale * bend(S), and lag.coefficient * S at each lag.
/// (docs/methods/crosstalk.md)
struct EchoTerms {
    double linear = 0.0;
    double clipped_linear = 0.0;
    const Bend* bend = nullptr;
    double bend_scale = 0.0;
    double clipped_bend_scale = 0.0;
    std::vector<Lag> lags;

    /// The pair's best estimate, in victim electrons.
    static EchoTerms estimate(const Pair& pair, const PairExtras* extras, double victim_gain);
    /// At least the magnitude of the echo, at any one pixel, of a source pixel of this level, all
    /// lags counted. Grows with the level.
    [[nodiscard]] double bound(double level_adu) const;
};

/// From the clock of a source to the pixels of a victim.
struct EchoPath {
    const ReadoutGeometry* victim = nullptr;
    int offset_ticks = 0;
};

/// Adds scale * echo of these runs to the window; echoes in prescan or overscan have no pixel.
void add_echo(const SignalWindow& window, const EchoPath& path, const SourceImage& source,
              const SourceRun& run, const EchoTerms& terms, double scale);

/// Adds the square of spread_e * S to the window: the variance of an echo whose coefficient has
/// this spread (all levels and lags counted as lag 0: used for sums of faint echoes only).
void add_echo_variance(const SignalWindow& window, const EchoPath& path, const SourceImage& source,
                       const SourceRun& run, double spread_e);

/// The echo of one blob on one victim.
class EchoShape : public SignalShape {
public:
    EchoShape(std::shared_ptr<const SourceImage> source, const SourceBlob& blob, EchoPath path,
              EchoTerms terms);
    [[nodiscard]] PixelBox bounds() const override { return bounds_; }
    void add_to(const SignalWindow& window, float scale) const override;
    [[nodiscard]] double total_e() const;  ///< over all victim pixels

private:
    std::shared_ptr<const SourceImage> source_;
    const SourceBlob& blob_;
    EchoPath path_;
    EchoTerms terms_;
    PixelBox bounds_;
    bool whole_ = false;  ///< no part falls into prescan or overscan
};

}  // namespace straymark::crosstalk

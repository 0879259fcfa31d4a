#pragma once

#include <array>
#include <cstdint>
#include <limits>
#include <optional>
#include <string>
#include <vector>

#include "artifacts/product.h"
#include "camera/camera.h"

namespace straymark::crosstalk {

/// How a pair stands to each other: coupling and its prior depend on it.
enum class Stratum : std::uint8_t { device, board, rest };

/// detected: measured and real; zero: measured, none found (predicted as 0 with its error);
/// unmeasured, unresolved: not known, predicted from the stratum's prior.
enum class PairStatus : std::uint8_t { detected, zero, unmeasured, unresolved };

/// An echo that comes `ticks` later (negative: earlier) than its source pixel.
struct Lag {
    int ticks = 0;
    double coefficient = 0.0;  ///< victim ADU per source ADU
    double error = 0.0;
};

/// Extra echo c1 x + c2 x^2 + c3 x^3 with x = S - onset, zero below the onset; ADU.
struct Bend {
    double onset_adu = std::numeric_limits<double>::infinity();
    double c1 = 0.0, c2 = 0.0, c3 = 0.0;
    double relative_error = 0.0;

    [[nodiscard]] double operator()(double signal_adu) const {
        const double x = signal_adu - onset_adu;
        return x > 0.0 ? x * (c1 + x * (c2 + x * c3)) : 0.0;
    }
};

/// What replaces lag 0 and bend where the source is clipped.
struct Clipped {
    double coefficient = 0.0;
    double error = 0.0;
};

/// The rarer parts of a pair.
struct PairExtras {
    std::vector<Lag> lags;  ///< never lag 0
    std::optional<Bend> bend;
    std::optional<Clipped> clipped;
};

struct Pair {
    float coefficient = 0.0F;  ///< lag 0, victim ADU per source ADU; a prior's mean if not known
    float error = 0.0F;        ///< 1 sigma; a prior's spread if not known
    std::int32_t extras = -1;  ///< index into Params::extras; -1: none
    PairStatus status = PairStatus::unmeasured;

    [[nodiscard]] bool known() const {
        return status == PairStatus::detected || status == PairStatus::zero;
    }
};

struct Prior {
    double mean = 0.0;
    double spread = 0.0;
};

/// The coupling matrix of a camera. Amplifiers are numbered through the camera, detector by
/// detector.
class Params {
public:
    /// Throws InputError for a product of another camera, an unknown amplifier or status, a pair
    /// that is not read in step, a pair twice, a number that is not finite or beyond +-1, a missing
    /// prior.
    static Params from_product(const Camera& camera, const Product& product);

    [[nodiscard]] int amplifiers() const { return static_cast<int>(clock_of_.size()); }
    [[nodiscard]] int flat(AmplifierRef ref) const {
        return first_[static_cast<std::size_t>(ref.detector)] + ref.amplifier;
    }
    [[nodiscard]] AmplifierRef ref(int flat_index) const {
        return refs_[static_cast<std::size_t>(flat_index)];
    }
    /// Live amplifiers read in step with `victim`, itself left out; flat, ascending.
    [[nodiscard]] std::vector<int> sources_of(int victim) const;
    /// Nothing for amplifiers that are not read in step.
    [[nodiscard]] const Pair& pair(int victim, int source) const;
    [[nodiscard]] const PairExtras* extras(const Pair& pair) const {
        return pair.extras < 0 ? nullptr : &extras_[static_cast<std::size_t>(pair.extras)];
    }
    [[nodiscard]] bool in_step(int victim, int source) const {
        const int clock = clock_of_[static_cast<std::size_t>(victim)];
        return victim != source && clock >= 0 &&
               clock == clock_of_[static_cast<std::size_t>(source)];
    }
    [[nodiscard]] int offset_ticks(int victim, int source) const;
    [[nodiscard]] const std::string& calibration() const { return calibration_; }
    /// Largest sum over lags of |coefficient| + 2 errors of any pair.
    [[nodiscard]] double largest_coupling() const { return largest_coupling_; }

private:
    struct Clock {
        std::vector<int> members;  ///< flat, ascending
        std::vector<Pair> pairs;   ///< [victim place * members + source place]
    };
    explicit Params(const Camera& camera);
    void fill_priors(const Camera& camera, const std::array<std::optional<Prior>, 3>& priors,
                     const std::string& path);
    Pair& pair_at(int victim, int source);
    void read_pairs(const Camera& camera, const Product& product);
    void read_lags(const Camera& camera, const Product& product);
    void read_bends(const Camera& camera, const Product& product);
    PairExtras& extras_of(int victim, int source);
    void find_largest_coupling();

    std::vector<int> first_;  ///< flat index of each detector's first amplifier
    std::vector<AmplifierRef> refs_;
    std::vector<int> clock_of_;  ///< -1: dead
    std::vector<int> place_of_;  ///< within its clock
    std::vector<Clock> clocks_;
    std::vector<PairExtras> extras_;
    std::map<std::pair<int, int>, int> offsets_;  ///< (victim, source)
    std::string calibration_;
    double largest_coupling_ = 0.0;
};

Stratum stratum_of(const Camera& camera, AmplifierRef a, AmplifierRef b);
const char* name_of(Stratum stratum);

}  // namespace straymark::crosstalk

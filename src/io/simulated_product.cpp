#include "io/simulated_product.h"

#include <cmath>
#include <cstdint>
#include <string>
#include <utility>
#include <vector>

namespace straymark::io {
namespace {

using simulate::Characterisation;
using simulate::PairMeasurement;
using simulate::Stratum;
using simulate::World;

// What a measurement of a given error would have rested on: pixels of this level in this noise.
constexpr double kCalibrationLevel_adu = 30000.0;
constexpr double kCalibrationNoise_adu = 12.0;
constexpr std::int64_t kCalibrationExposures = 12;
constexpr double kDetectedSignificance = 3.0;

ProductTable pairs_table(const World& world, const std::vector<PairMeasurement>& pairs) {
    std::vector<std::string> victim;
    std::vector<std::string> source;
    std::vector<std::string> status;
    std::vector<double> coefficient;
    std::vector<double> error;
    std::vector<double> significance;
    std::vector<std::int64_t> pixels;
    for (const PairMeasurement& pair : pairs) {
        const auto [value, sigma] = pair.coefficient;
        victim.push_back(world.instrument.channels[pair.victim].name);
        source.push_back(world.instrument.channels[pair.source].name);
        coefficient.push_back(value);
        error.push_back(sigma);
        significance.push_back(std::fabs(value) / sigma);
        status.emplace_back(significance.back() > kDetectedSignificance ? "detected" : "zero");
        pixels.push_back(static_cast<std::int64_t>(
            std::ceil(std::pow(kCalibrationNoise_adu / (kCalibrationLevel_adu * sigma), 2.0))));
    }
    return {pairs.size(),
            {{"victim", std::move(victim)},
             {"source", std::move(source)},
             {"coefficient", std::move(coefficient)},
             {"error", std::move(error)},
             {"pixels", std::move(pixels)},
             {"exposures", std::vector(pairs.size(), kCalibrationExposures)},
             {"chi2", std::vector(pairs.size(), 1.0)},
             {"significance", std::move(significance)},
             {"status", std::move(status)}}};
}

ProductTable lags_table(const World& world, const std::vector<PairMeasurement>& pairs) {
    std::vector<std::string> victim;
    std::vector<std::string> source;
    std::vector<std::int64_t> ticks;
    std::vector<double> coefficient;
    std::vector<double> error;
    for (const PairMeasurement& pair : pairs) {
        for (const simulate::LagCoefficient& lag : pair.lags) {
            victim.push_back(world.instrument.channels[pair.victim].name);
            source.push_back(world.instrument.channels[pair.source].name);
            ticks.push_back(lag.lag_ticks);
            coefficient.push_back(lag.coefficient.value);
            error.push_back(lag.coefficient.error);
        }
    }
    return {ticks.size(),
            {{"victim", std::move(victim)},
             {"source", std::move(source)},
             {"lag", std::move(ticks)},
             {"coefficient", std::move(coefficient)},
             {"error", std::move(error)}}};
}

ProductTable bends_table(const World& world, const std::vector<PairMeasurement>& pairs) {
    std::vector<std::string> victim;
    std::vector<std::string> source;
    std::vector<double> onset;
    std::vector<double> c1;
    std::vector<double> c2;
    std::vector<double> c3;
    std::vector<double> error;
    std::vector<double> clipped;
    std::vector<double> clipped_error;
    for (const PairMeasurement& pair : pairs) {
        if (!pair.bend) {
            continue;
        }
        victim.push_back(world.instrument.channels[pair.victim].name);
        source.push_back(world.instrument.channels[pair.source].name);
        onset.push_back(pair.bend->onset_adu);
        c1.push_back(pair.bend->c1);
        c2.push_back(pair.bend->c2);
        c3.push_back(pair.bend->c3);
        error.push_back(pair.bend->relative_error);
        clipped.push_back(pair.bend->clipped.value);
        clipped_error.push_back(pair.bend->clipped.error);
    }
    return {onset.size(),
            {{"victim", std::move(victim)},
             {"source", std::move(source)},
             {"onset_adu", std::move(onset)},
             {"c1", std::move(c1)},
             {"c2", std::move(c2)},
             {"c3", std::move(c3)},
             {"error", std::move(error)},
             {"clipped", std::move(clipped)},
             {"clipped_error", std::move(clipped_error)}}};
}

std::string name_of(Stratum stratum) {
    switch (stratum) {
        case Stratum::device:
            return "device";
        case Stratum::board:
            return "board";
        case Stratum::rest:
            break;
    }
    return "rest";
}

ProductTable priors_table(const Characterisation& known) {
    std::vector<std::string> stratum;
    std::vector<double> mean;
    std::vector<double> spread;
    for (const simulate::StratumSpread& prior : known.strata) {
        stratum.push_back(name_of(prior.stratum));
        mean.push_back(prior.mean);
        spread.push_back(prior.spread);
    }
    return {known.strata.size(),
            {{"stratum", std::move(stratum)},
             {"mean", std::move(mean)},
             {"spread", std::move(spread)}}};
}

}  // namespace

Product simulated_product(const World& world, const Characterisation& known, MjdUtc from, MjdUtc to,
                          bool pairs) {
    static const std::vector<PairMeasurement> kNone;
    const std::vector<PairMeasurement>& measured = pairs ? known.pairs : kNone;
    Product product;
    product.kind = "crosstalk";
    product.camera = world.scenario.name;
    product.version = pairs ? "simulated" : "unmeasured";
    product.valid_from = from;
    product.valid_to = to;
    product.tables.emplace("PAIRS", pairs_table(world, measured));
    product.tables.emplace("LAGS", lags_table(world, measured));
    product.tables.emplace("BENDS", bends_table(world, measured));
    product.tables.emplace("PRIORS", priors_table(known));
    return product;
}

}  // namespace straymark::io

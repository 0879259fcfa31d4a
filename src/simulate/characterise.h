#pragma once

#include <optional>
#include <vector>

#include "simulate/coupling.h"
#include "simulate/instrument.h"

/// What a laboratory would find out about the leaks by putting signals into one channel after
/// another and looking at all others. Nothing is taken from the drawn parameters: only levels go in
/// and echoes come out.

namespace straymark::simulate {

/// A coefficient with its 1-sigma error, as measured.
struct Measured {
    double value = 0.0;
    double error = 0.0;
};

struct LagCoefficient {
    int lag_ticks = 0;
    Measured coefficient;
};

/// The echo beyond the straight line: c1 x + c2 x^2 + c3 x^3 with x the source's ADU above onset.
struct Bend {
    double onset_adu = 0.0;  ///< of the source above its empty field
    double c1 = 0.0, c2 = 0.0, c3 = 0.0;
    double relative_error = 0.0;
    Measured clipped;  ///< multiplies the clipped reading of the source
};

struct PairMeasurement {
    int source = 0;
    int victim = 0;
    int delay_ticks = 0;               ///< whole ticks, known from the wiring
    Measured coefficient;              ///< at the delay, victim ADU for one source ADU
    std::vector<LagCoefficient> lags;  ///< further ticks after the delay that carry an echo
    std::optional<Bend> bend;          ///< or the clipped value alone: then c1, c2, c3 are 0
};

struct StratumSpread {
    Stratum stratum = Stratum::rest;
    double mean = 0.0;
    double spread = 0.0;
};

struct Characterisation {
    std::vector<PairMeasurement> pairs;  ///< all pairs of each clock, by victim, then source
    std::vector<StratumSpread> strata;
};

/// The raw value at and above which the observatory calls a channel saturated: where the converter
/// ends, or a little below full well, whichever is lower.
double saturation_adu(const Scenario& scenario, const Instrument& instrument, int channel);

/// even_e: charge of the empty field on which the signals are put.
Characterisation characterise(const Scenario& scenario, const Instrument& instrument,
                              const Coupling& coupling, double even_e);

}  // namespace straymark::simulate

#pragma once

#include "artifacts/product.h"
#include "simulate/characterise.h"
#include "simulate/exposure.h"

namespace straymark::io {

/// A crosstalk product as a measurement of the simulated camera would give it; with `pairs` false
/// only what is usual in each stratum, as if nothing had been measured. Valid from `from` to `to`.
Product simulated_product(const simulate::World& world, const simulate::Characterisation& known,
                          MjdUtc from, MjdUtc to, bool pairs);

}  // namespace straymark::io

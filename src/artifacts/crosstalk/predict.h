#pragma once

#include <memory>

#include "artifacts/artifact.h"

namespace straymark::crosstalk {

/// Predicts echoes from one coupling matrix (docs/methods/crosstalk.md).
///
/// Promises: every pair's every source pixel at or above the digest's floor is in a mark or in the
/// faint sum, but for pixels whose echo is under kTruncation of the threshold on a flat plateau; a
/// source whose pixels are not known makes its victims' pixels unassessed wherever a saturated one
/// would matter.
std::unique_ptr<Predictor> make_predictor(const Camera& camera, const Product& product);

/// Echoes of a source level below which a plateau of them responds with less than this fraction of
/// the threshold are left out; so is what the digest's floor cuts.
inline constexpr double kTruncation = 0.1;

}  // namespace straymark::crosstalk

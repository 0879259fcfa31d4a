#include "score/truth.h"

#include <algorithm>

namespace straymark::score {

const TrueAmplifier* amplifier_at(const TrueDetector& detector, int x, int y) {
    const auto found =
        std::find_if(detector.amplifiers.begin(), detector.amplifiers.end(),
                     [x, y](const TrueAmplifier& a) { return a.section.contains(x, y); });
    return found == detector.amplifiers.end() ? nullptr : &*found;
}

double sum_of_squares(const TruePsf& psf) {
    double sum = 0.0;
    for (const float value : psf.values) {
        sum += static_cast<double>(value) * static_cast<double>(value);
    }
    return sum;
}

}  // namespace straymark::score

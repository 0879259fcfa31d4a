#include "score/figure_detector.h"

#include <cmath>

#include "score/pixels.h"

namespace straymark::score {

PixelClass class_of(const FigureDetector& detector, std::size_t index) {
    const auto response = static_cast<double>(detector.response[index]);
    const double strength = std::abs(response);
    const BitValues& values = detector.found.values;
    const std::int32_t bits = detector.found.present ? detector.found.bits[index] : 0;
    const bool any_flag = (bits & (values.positive | values.negative)) != 0;
    if (flagged_as(detector.found, index, response) && strength >= kTrueResponse) {
        return PixelClass::found;
    }
    if (strength >= kRequiredResponse) {
        return PixelClass::missed;
    }
    if (any_flag) {
        return PixelClass::outside;
    }
    if (strength >= kTrueResponse) {
        return PixelClass::between;
    }
    return (bits & (values.marginal | values.unassessed)) != 0 ? PixelClass::unknown
                                                               : PixelClass::clear;
}

}  // namespace straymark::score

#pragma once

#include <map>
#include <string>
#include <vector>

#include "camera/camera.h"
#include "io/yaml.h"

/// The parts `layouts` and `detectors` of a camera file.

namespace straymark::io {

/// Between one and four thousand detectors, with their amplifiers but without the numbers of the
/// amplifier table. Every layout's sections tile its detector; ids are unique.
std::vector<Detector> read_detectors(const YamlValue& layouts, const YamlValue& detectors);

/// A name of a detector, amplifier, camera or layout: 1 to 32 of A-Z a-z 0-9 _ . + -
std::string read_identifier(const YamlValue& value);

}  // namespace straymark::io

#pragma once

#include <string>

#include "io/yaml.h"

namespace straymark::io {

/// The tree of a YAML text of one document: what YamlFile stands on. Throws InputError.
YamlNode parse_yaml(const std::string& path, const std::string& text);

}  // namespace straymark::io

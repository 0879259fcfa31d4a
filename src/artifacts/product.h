#pragma once

#include <cstdint>
#include <map>
#include <string>
#include <variant>
#include <vector>

#include "core/frames.h"

namespace straymark {

/// One table of a calibration product, by column; all columns have `rows` entries.
struct ProductTable {
    using Column =
        std::variant<std::vector<double>, std::vector<std::int64_t>, std::vector<std::string>>;
    std::size_t rows = 0;
    std::map<std::string, Column> columns;  ///< names in lower case
};

/// A calibration product as read from its file: who, for what, from when to when, and its tables.
/// Each artifact turns it into its own parameters and checks every number on the way.
struct Product {
    std::string path;
    std::string digest;
    std::string kind;  ///< registry name: "crosstalk", ...
    std::string camera;
    std::string mode;    ///< read-out mode; empty: any
    std::string filter;  ///< empty: any
    std::string version;
    MjdUtc valid_from{-1e9};
    MjdUtc valid_to{1e9};                        ///< exclusive
    std::map<std::string, ProductTable> tables;  ///< names in upper case
};

}  // namespace straymark

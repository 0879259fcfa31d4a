#pragma once

#include <string>

#include "artifacts/product.h"

namespace straymark::io {

/// What a calibration file says of its own format, before the rest is read.
struct ProductFormat {
    std::string kind;  ///< registry name
    int version = 0;
};

/// The format of a calibration product: FORMAT of a FITS primary header, or `format` of a JSON
/// object: "straymark-KIND/VERSION". Throws InputError where the file is neither or names no such
/// format.
ProductFormat product_format(const std::string& path);

/// Reads a calibration product in FITS (docs/crosstalk_product.md). Columns that hold an array in
/// each row are left out. Throws InputError: damaged (sums are checked), of a newer format, without
/// a camera, with validity dates that make no sense, with a table or column twice.
Product read_product(const std::string& path);

/// Writes a product as FITS: known columns in their documented order and with their units, others
/// behind them in alphabetical order. The bytes depend on the content alone. `product.path` and
/// `product.digest` are not used. Throws InputError where `kind` or `camera` is empty.
void write_product(const std::string& path, const Product& product);

}  // namespace straymark::io

#pragma once

#include <span>
#include <string>

#include "core/pixel_box.h"
#include "io/files.h"
#include "io/fits_scan.h"

/// Tile-compressed images are decoded by a child process with limits on memory and time, because
/// damaged ones can kill the library that decodes them. A child that dies is an input error here,
/// and the night goes on (docs/decisions/0004-compressed-raw-files-are-decoded-in-a-child.md).

namespace straymark::io {

/// The first argument by which a program is asked to be that child.
inline constexpr const char* kDecodeArgument = "--decode-isolated";
/// The program itself, which must call isolated_decode_main when it is asked to.
inline constexpr const char* kThisProgram = "/proc/self/exe";

/// A two-dimensional image, decoded: physical values, BLANK and not-a-number as NaN.
class DecodedImage {
public:
    DecodedImage(FileHandle pixels, int width, int height, std::string path)
        : pixels_(std::move(pixels), std::move(path)), width_(width), height_(height) {}
    /// box: within the image; out: box.width() * box.height() values, row after row. Thread-safe.
    void read(const PixelBox& box, std::span<float> out) const;

private:
    InputFile pixels_;  ///< floats in memory, shared with the child that wrote them
    int width_, height_;
};

/// Decodes one compressed two-dimensional image (RICE_1, GZIP_1, GZIP_2, HCOMPRESS_1). Its DATASUM
/// is verified first, where it has one. program: that runs isolated_decode_main. Throws InputError
/// ("this file is corrupt") where the sum differs, or the child fails, dies or does not end in
/// time. Thread-safe.
DecodedImage decode_isolated(const InputFile& file, const FitsHdu& hdu, const std::string& program);

/// The child's side: main of a program whose first argument is kDecodeArgument. Returns its exit
/// status.
int isolated_decode_main(int argc, char** argv);

}  // namespace straymark::io

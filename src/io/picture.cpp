#include "io/picture.h"

#include <cassert>
#include <cstddef>
#include <png.h>
#include <stdexcept>
#include <vector>

#include "io/files.h"

namespace straymark::io {

void write_png(const std::string& path, int width, int height, std::span<const std::uint8_t> rgb) {
    assert(width > 0 && height > 0);
    assert(rgb.size() ==
           std::size_t{3} * static_cast<std::size_t>(width) * static_cast<std::size_t>(height));
    // The library's simple interface: it encodes into memory, without callbacks or long jumps here.
    png_image image{};
    image.version = PNG_IMAGE_VERSION;
    image.width = static_cast<png_uint_32>(width);
    image.height = static_cast<png_uint_32>(height);
    image.format = PNG_FORMAT_RGB;
    png_alloc_size_t size = PNG_IMAGE_PNG_SIZE_MAX(image);
    std::vector<std::byte> encoded(size);
    if (png_image_write_to_memory(&image, encoded.data(), &size, 0, rgb.data(), 0, nullptr) == 0) {
        throw std::runtime_error(path + ": encode picture: " + image.message);
    }
    encoded.resize(size);
    OutputFile file(path);
    file.write(encoded);
    file.commit();
}

}  // namespace straymark::io

#include "cli/raw_arguments.h"

#include <algorithm>
#include <array>
#include <filesystem>
#include <string_view>
#include <system_error>

#include "core/error.h"

namespace straymark::cli {
namespace {

bool is_raw_name(std::string_view name) {
    constexpr std::array<std::string_view, 2> kCompressed = {".fz", ".gz"};
    constexpr std::array<std::string_view, 3> kPlain = {".fits", ".fit", ".fts"};
    if (name.starts_with('.')) {
        return false;
    }
    for (const std::string_view ending : kCompressed) {
        if (name.ends_with(ending)) {
            name.remove_suffix(ending.size());
        }
    }
    return std::any_of(kPlain.begin(), kPlain.end(),
                       [name](std::string_view ending) { return name.ends_with(ending); });
}

}  // namespace

std::vector<std::string> raw_files_from(const std::vector<std::string>& arguments) {
    std::vector<std::string> files;
    for (const std::string& argument : arguments) {
        std::error_code error;
        if (!std::filesystem::is_directory(argument, error)) {
            files.push_back(argument);
            continue;
        }
        const std::size_t before = files.size();
        for (const auto& entry : std::filesystem::directory_iterator(argument)) {
            if (is_raw_name(entry.path().filename().string()) && !entry.is_directory()) {
                files.push_back(entry.path().string());
            }
        }
        if (files.size() == before) {
            throw UsageError(argument +
                             ": found no FITS file in this folder; expected raw exposures");
        }
    }
    std::sort(files.begin(), files.end());
    return files;
}

}  // namespace straymark::cli

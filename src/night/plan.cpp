#include "night/plan.h"

#include <algorithm>
#include <cmath>
#include <fmt/format.h>
#include <map>
#include <optional>
#include <set>
#include <utility>

#include "core/error.h"
#include "core/parallel.h"

namespace straymark {
namespace {

/// Two raw files of one name, but for folder and extension, would claim one mask file.
void skip_clashing_names(const MaskStore& masks, std::vector<std::string>& paths,
                         std::vector<Skipped>& skipped) {
    std::map<std::string, std::vector<std::string>> by_mask;
    for (const std::string& path : paths) {
        by_mask[masks.path_of(path)].push_back(path);
    }
    std::erase_if(paths, [&](const std::string& path) {
        const auto& same = by_mask[masks.path_of(path)];
        if (same.size() < 2) {
            return false;
        }
        skipped.push_back(
            {path, fmt::format("{}: found {} files of this name ({}); expected one, for each "
                               "mask is named after its raw file; rename or move one",
                               path, same.size(), fmt::join(same, ", "))});
        return true;
    });
}

struct Inspected {
    std::optional<RawFile> file;
    std::string problem;
};

std::vector<Inspected> inspect_all(const RawReader& reader, const std::vector<std::string>& paths,
                                   int threads) {
    std::vector<Inspected> inspected(paths.size());
    parallel_for(static_cast<int>(paths.size()), threads, [&](int i) {
        const auto at = static_cast<std::size_t>(i);
        try {
            inspected[at].file = reader.inspect(paths[at]);
        } catch (const InputError& error) {
            inspected[at].problem = error.what();
        } catch (const SystemError& error) {
            inspected[at].problem = error.what();
        }
    });
    return inspected;
}

/// Why these files cannot be one exposure; nothing if they can.
std::optional<std::string> conflict_of(const std::vector<RawFile>& files) {
    constexpr double kSameInstantDays = 1.0 / kSecondsPerDay;
    std::map<int, const RawFile*> holder;
    for (const RawFile& file : files) {
        const ExposureHeader& header = file.header;
        const ExposureHeader& first = files.front().header;
        if (std::abs(header.start.days - first.start.days) > kSameInstantDays ||
            header.filter != first.filter || header.type != first.type) {
            return fmt::format(
                "exposure '{}': found start, filter or type in {} that differ from those in {}; "
                "expected files of one exposure to agree; give each exposure its own identifier",
                header.id, file.path, files.front().path);
        }
        for (const int detector : file.detectors) {
            const auto [at, fresh] = holder.emplace(detector, &file);
            if (!fresh) {
                return fmt::format(
                    "exposure '{}': found two different contents for one detector, in {} and {}; "
                    "expected one; keep the right file and remove the other",
                    header.id, at->second->path, file.path);
            }
        }
    }
    return std::nullopt;
}

}  // namespace

NightPlan plan_night(const RawReader& reader, const MaskStore& masks,
                     const std::vector<std::string>& paths, int threads) {
    NightPlan plan;
    std::vector<std::string> sorted = paths;
    std::sort(sorted.begin(), sorted.end());
    sorted.erase(std::unique(sorted.begin(), sorted.end()), sorted.end());
    skip_clashing_names(masks, sorted, plan.skipped);

    std::map<std::string, std::vector<RawFile>> by_id;
    std::map<std::string, std::string> by_content;
    std::vector<Inspected> inspected = inspect_all(reader, sorted, threads);
    for (std::size_t i = 0; i < sorted.size(); ++i) {
        if (!inspected[i].file) {
            plan.skipped.push_back({sorted[i], inspected[i].problem});
            continue;
        }
        RawFile& file = *inspected[i].file;
        const auto [first, fresh] = by_content.emplace(file.digest, file.path);
        if (!fresh) {
            plan.skipped.push_back(
                {file.path, fmt::format("{}: the same bytes as {}", file.path, first->second),
                 true});
            continue;
        }
        by_id[file.header.id].push_back(std::move(file));
    }
    for (auto& [id, files] : by_id) {
        if (const auto conflict = conflict_of(files)) {
            for (const RawFile& file : files) {
                plan.skipped.push_back({file.path, *conflict});
            }
            continue;
        }
        ExposureHeader header = files.front().header;
        plan.exposures.push_back({std::move(header), std::move(files)});
    }
    std::stable_sort(plan.exposures.begin(), plan.exposures.end(),
                     [](const PlannedExposure& a, const PlannedExposure& b) {
                         return std::pair(a.header.start, a.header.id) <
                                std::pair(b.header.start, b.header.id);
                     });
    return plan;
}

}  // namespace straymark

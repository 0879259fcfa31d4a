#include "io/site_file.h"

#include <array>
#include <string_view>

#include "artifacts/mark.h"
#include "io/camera_file.h"
#include "io/defects_file.h"
#include "io/files.h"
#include "io/yaml.h"

namespace straymark::io {
namespace {

/// The keys of `thresholds` and `predictors`, by ArtifactKind.
constexpr std::array<std::string_view, kArtifactKinds> kArtifactKeys{"crosstalk", "ghost", "spike",
                                                                     "persistence"};

void read_thresholds(const YamlValue& value, DecisionSettings& decision) {
    const YamlMapping map = value.mapping({"crosstalk", "ghost", "spike", "persistence"});
    for (std::size_t kind = 0; kind < kArtifactKeys.size(); ++kind) {
        if (const auto threshold = map.optional(kArtifactKeys[kind])) {
            decision.threshold[kind] = threshold->number({0.01, 1000.0});
        }
    }
}

void read_predictors(const YamlValue& value, std::array<bool, kArtifactKinds>& on) {
    const YamlMapping map = value.mapping({"crosstalk", "ghost", "spike", "persistence"});
    for (std::size_t kind = 0; kind < kArtifactKeys.size(); ++kind) {
        if (const auto state = map.optional(kArtifactKeys[kind])) {
            // true and false: what YAML 1.1 tools write for on and off.
            on[kind] = state->choice<bool>(
                {{"on", true}, {"off", false}, {"true", true}, {"false", false}});
        }
    }
}

void read_settings(const YamlMapping& top, Site& site) {
    if (const auto thresholds = top.optional("thresholds")) {
        read_thresholds(*thresholds, site.decision);
    }
    if (const auto noise = top.optional("template_noise")) {
        site.decision.template_noise = noise->number({0.0, 10.0});
    }
    if (const auto detection = top.optional("detection")) {
        const YamlMapping map = detection->mapping({"background_px"});
        if (const auto background = map.optional("background_px")) {
            site.decision.background_px = background->integer(0, 4096);
        }
    }
    if (const auto predictors = top.optional("predictors")) {
        read_predictors(*predictors, site.predictor_on);
    }
    if (const auto accept = top.optional("accept")) {
        const YamlMapping map = accept->mapping({"unassessed_fraction"});
        if (const auto fraction = map.optional("unassessed_fraction")) {
            site.accept_unassessed_fraction = fraction->number({0.0, 1.0});
        }
    }
}

}  // namespace

Site load_site(const std::string& path) {
    const YamlFile file(path);
    file.require_format("straymark-site", 1);
    const YamlMapping top = file.root().mapping(
        {"format", "camera", "calibrations", "stars", "history", "masks", "digests", "defects",
         "thresholds", "template_noise", "detection", "predictors", "accept"});
    const auto beside = [&path](const YamlValue& name) {
        constexpr std::size_t kLongestPath = 4096;
        return resolved_beside(path, name.text(kLongestPath));
    };
    Site site;
    site.path = path;
    site.camera_path = beside(top.required("camera"));
    site.calibrations_path = beside(top.required("calibrations"));
    site.stars_path = beside(top.required("stars"));
    site.history_path = beside(top.required("history"));
    site.masks_path = beside(top.required("masks"));
    site.digests_path = beside(top.required("digests"));
    read_settings(top, site);
    site.camera = load_camera(site.camera_path);
    if (const auto defects = top.optional("defects")) {
        site.defects_path = beside(*defects);
        site.defects = load_defects(*site.defects_path, site.camera);
        site.defects_digest = file_digest(InputFile(*site.defects_path));
    }
    return site;
}

}  // namespace straymark::io

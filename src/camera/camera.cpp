#include "camera/camera.h"

namespace straymark {

std::string Camera::amplifier_name(AmplifierRef ref) const {
    return detectors[static_cast<std::size_t>(ref.detector)].id + "/" + amplifier(ref).id;
}

std::optional<int> Camera::detector_index(const std::string& id) const {
    for (std::size_t i = 0; i < detectors.size(); ++i) {
        if (detectors[i].id == id) {
            return static_cast<int>(i);
        }
    }
    return std::nullopt;
}

std::optional<AmplifierRef> Camera::amplifier_ref(const std::string& full_name) const {
    const std::size_t slash = full_name.find('/');
    if (slash == std::string::npos) {
        return std::nullopt;
    }
    const std::optional<int> detector = detector_index(full_name.substr(0, slash));
    if (!detector) {
        return std::nullopt;
    }
    const std::string id = full_name.substr(slash + 1);
    const auto& amplifiers = detectors[static_cast<std::size_t>(*detector)].amplifiers;
    for (std::size_t i = 0; i < amplifiers.size(); ++i) {
        if (amplifiers[i].id == id) {
            return AmplifierRef{*detector, static_cast<int>(i)};
        }
    }
    return std::nullopt;
}

std::map<std::string, std::vector<AmplifierRef>> Camera::clock_groups() const {
    std::map<std::string, std::vector<AmplifierRef>> groups;
    for (std::size_t d = 0; d < detectors.size(); ++d) {
        const auto& amplifiers = detectors[d].amplifiers;
        for (std::size_t a = 0; a < amplifiers.size(); ++a) {
            if (amplifiers[a].status == AmplifierStatus::live) {
                groups[amplifiers[a].clock].push_back({static_cast<int>(d), static_cast<int>(a)});
            }
        }
    }
    return groups;
}

}  // namespace straymark

#include "camera/camera.h"

#include <catch2/catch.hpp>

using namespace straymark;

namespace {

Amplifier amplifier_of(const std::string& id, const std::string& clock,
                       AmplifierStatus status = AmplifierStatus::live) {
    Amplifier amplifier;
    amplifier.id = id;
    amplifier.clock = clock;
    amplifier.status = status;
    return amplifier;
}

Camera two_detectors() {
    Camera camera;
    camera.detectors.resize(2);
    camera.detectors[0].id = "d1";
    camera.detectors[0].amplifiers = {amplifier_of("a", "main"), amplifier_of("b", "mux"),
                                      amplifier_of("c", "main", AmplifierStatus::dead)};
    camera.detectors[1].id = "guider";
    camera.detectors[1].role = DetectorRole::guide;
    camera.detectors[1].amplifiers = {amplifier_of("a", "main")};
    return camera;
}

}  // namespace

TEST_CASE("an amplifier's name is DETECTOR/AMPLIFIER and leads back to it") {
    const Camera camera = two_detectors();
    CHECK(camera.amplifier_name({0, 1}) == "d1/b");
    CHECK(camera.amplifier_ref("d1/b") == AmplifierRef{0, 1});
    CHECK(camera.amplifier_ref("guider/a") == AmplifierRef{1, 0});
    CHECK(camera.detector_index("guider") == 1);
}

TEST_CASE("names that mean no amplifier lead nowhere") {
    const Camera camera = two_detectors();
    for (const char* name : {"d1", "d1/", "/a", "d1/z", "d2/a", "", "/", "d1/a/b", "D1/a"}) {
        CHECK_FALSE(camera.amplifier_ref(name).has_value());
    }
    CHECK_FALSE(camera.detector_index("").has_value());
}

TEST_CASE("a clock's group holds its live amplifiers, a guide detector's too") {
    const auto groups = two_detectors().clock_groups();
    REQUIRE(groups.size() == 2);
    CHECK(groups.at("main") == std::vector<AmplifierRef>{{0, 0}, {1, 0}});
    CHECK(groups.at("mux") == std::vector<AmplifierRef>{{0, 1}});
}

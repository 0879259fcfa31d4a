#include "night/plan.h"

#include <algorithm>
#include <catch2/catch.hpp>
#include <map>

#include "core/error.h"

using namespace straymark;

namespace {

/// Raw files that exist only here: path -> what inspecting it says; absent: a damaged file.
class FakeReader : public RawReader {
public:
    std::map<std::string, RawFile> files;

    void add(const std::string& path, const std::string& id, double start,
             std::vector<int> detectors, const std::string& content) {
        RawFile file;
        file.path = path;
        file.digest = content;
        file.header.id = id;
        file.header.start.days = start;
        file.header.filter = "r";
        file.detectors = std::move(detectors);
        files[path] = file;
    }
    [[nodiscard]] RawFile inspect(const std::string& path) const override {
        const auto found = files.find(path);
        if (found == files.end()) {
            throw InputError({path, "HDU 2", "end of file", "more bytes", "fetch it again"});
        }
        return found->second;
    }
    [[nodiscard]] std::unique_ptr<DetectorFrame> open(const RawFile&, int) const override {
        return nullptr;
    }
};

class FakeMasks : public MaskStore {
public:
    [[nodiscard]] std::optional<MaskSummary> existing(const std::string&) const override {
        return std::nullopt;
    }
    [[nodiscard]] std::unique_ptr<MaskFileWriter> begin(const std::string&) override {
        return nullptr;
    }
    [[nodiscard]] std::string path_of(const std::string& raw_file) const override {
        const std::string name = raw_file.substr(raw_file.find('/') + 1);
        return "masks/" + name.substr(0, name.find('.')) + ".mask.fits";
    }
};

NightPlan planned(const FakeReader& reader, const std::vector<std::string>& paths) {
    return plan_night(reader, FakeMasks(), paths, 2);
}

std::vector<std::string> ids(const NightPlan& plan) {
    std::vector<std::string> found;
    for (const PlannedExposure& exposure : plan.exposures) {
        found.push_back(exposure.header.id);
    }
    return found;
}

}  // namespace

TEST_CASE("exposures come in time order, whatever the order of the files") {
    FakeReader reader;
    reader.add("c.fits", "late", 60000.3, {0}, "1");
    reader.add("a.fits", "early", 60000.1, {0}, "2");
    reader.add("b.fits", "middle", 60000.2, {0}, "3");
    std::vector<std::string> paths = {"a.fits", "b.fits", "c.fits"};
    do {
        const NightPlan plan = planned(reader, paths);
        CHECK(ids(plan) == std::vector<std::string>{"early", "middle", "late"});
        CHECK(plan.skipped.empty());
    } while (std::next_permutation(paths.begin(), paths.end()));
}

TEST_CASE("several files of one identifier are one exposure") {
    FakeReader reader;
    reader.add("n1_d1.fits", "n1", 60000.1, {0}, "1");
    reader.add("n1_d2.fits", "n1", 60000.1, {1, 2}, "2");
    const NightPlan plan = planned(reader, {"n1_d2.fits", "n1_d1.fits"});
    REQUIRE(plan.exposures.size() == 1);
    REQUIRE(plan.exposures[0].files.size() == 2);
    CHECK(plan.exposures[0].files[0].path == "n1_d1.fits");
}

TEST_CASE("a damaged file is skipped with its reason and the others go on") {
    FakeReader reader;
    reader.add("good.fits", "n1", 60000.1, {0}, "1");
    const NightPlan plan = planned(reader, {"bad.fits", "good.fits"});
    CHECK(ids(plan) == std::vector<std::string>{"n1"});
    REQUIRE(plan.skipped.size() == 1);
    CHECK_FALSE(plan.skipped[0].harmless);
    CHECK(plan.skipped[0].reason.find("end of file") != std::string::npos);
}

TEST_CASE("the same bytes a second time are left out, harmlessly") {
    FakeReader reader;
    reader.add("n1.fits", "n1", 60000.1, {0}, "same");
    reader.add("n1_again.fits", "n1", 60000.1, {0}, "same");
    const NightPlan plan = planned(reader, {"n1_again.fits", "n1.fits"});
    CHECK(plan.exposures.size() == 1);
    REQUIRE(plan.skipped.size() == 1);
    CHECK(plan.skipped[0].harmless);
    CHECK(plan.skipped[0].file == "n1_again.fits");
}

TEST_CASE("two contents for one detector of one exposure are both refused") {
    FakeReader reader;
    reader.add("n1.fits", "n1", 60000.1, {0, 1}, "this");
    reader.add("n1_other.fits", "n1", 60000.1, {1}, "that");
    reader.add("n2.fits", "n2", 60000.2, {0, 1}, "third");
    const NightPlan plan = planned(reader, {"n1.fits", "n1_other.fits", "n2.fits"});
    CHECK(ids(plan) == std::vector<std::string>{"n2"});
    CHECK(plan.skipped.size() == 2);
    for (const Skipped& one : plan.skipped) {
        CHECK_FALSE(one.harmless);
        CHECK(one.reason.find("n1.fits") != std::string::npos);
        CHECK(one.reason.find("n1_other.fits") != std::string::npos);
    }
}

TEST_CASE("files of one identifier whose headers disagree are refused") {
    FakeReader reader;
    reader.add("n1_d1.fits", "n1", 60000.1, {0}, "1");
    reader.add("n1_d2.fits", "n1", 60000.2, {1}, "2");
    const NightPlan plan = planned(reader, {"n1_d1.fits", "n1_d2.fits"});
    CHECK(plan.exposures.empty());
    CHECK(plan.skipped.size() == 2);
}

TEST_CASE("files that would claim one mask are refused, by folder or by extension") {
    FakeReader reader;
    reader.add("monday/n1.fits", "n1", 60000.1, {0}, "1");
    reader.add("tuesday/n1.fits", "n2", 60001.1, {0}, "2");
    reader.add("n3.fits", "n3", 60002.1, {0}, "3");
    reader.add("n3.fits.gz", "n4", 60002.2, {0}, "4");
    const NightPlan plan =
        planned(reader, {"monday/n1.fits", "tuesday/n1.fits", "n3.fits", "n3.fits.gz"});
    CHECK(plan.exposures.empty());
    CHECK(plan.skipped.size() == 4);
}

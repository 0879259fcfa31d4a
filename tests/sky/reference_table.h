#pragma once

#include <catch2/catch.hpp>
#include <fstream>
#include <map>
#include <sstream>
#include <string>
#include <vector>

namespace straymark::test {

/// Rows of a comma-separated table under tests/reference/, by column name.
class ReferenceTable {
public:
    using Row = std::map<std::string, std::string>;

    explicit ReferenceTable(const std::string& name) {
        std::ifstream in(std::string(STRAYMARK_TEST_DATA) + "/reference/" + name);
        std::string line;
        REQUIRE(std::getline(in, line));
        const std::vector<std::string> names = split(line);
        while (std::getline(in, line)) {
            const std::vector<std::string> fields = split(line);
            REQUIRE(fields.size() == names.size());
            Row row;
            for (std::size_t i = 0; i < names.size(); ++i) {
                row[names[i]] = fields[i];
            }
            rows.push_back(std::move(row));
        }
        REQUIRE_FALSE(rows.empty());
    }

    std::vector<Row> rows;

private:
    static std::vector<std::string> split(const std::string& line) {
        std::vector<std::string> out;
        std::istringstream in(line);
        for (std::string field; std::getline(in, field, ',');) {
            out.push_back(field);
        }
        return out;
    }
};

inline double number(const ReferenceTable::Row& row, const std::string& name) {
    return std::stod(row.at(name));
}

}  // namespace straymark::test

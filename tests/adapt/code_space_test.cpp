#include <catch2/catch.hpp>
#include <limits>

#include "tests/adapt/bench_of_one.hpp"

using namespace lanewright;
using namespace lanewright::tests;

TEST_CASE("a code space counts its codes and numbers them both ways") {
    const auto space = equalizer_space();
    CHECK(space.size() == 65'536);
    CHECK(space.at(0).value == std::vector<std::int32_t>{0, 0, 0, 0});
    CHECK(space.at(1).value == std::vector<std::int32_t>{0, 0, 0, 1});
    CHECK(space.at(65'535).value == std::vector<std::int32_t>{31, 15, 15, 7});
    for (std::uint64_t index = 0; index < space.size(); index += 97) {
        CHECK(space.index_of(space.at(index)) == index);
    }
}

TEST_CASE("ranges that begin below zero are numbered alike") {
    Dimension dimension;
    dimension.name = "offset";
    dimension.lowest = -8;
    dimension.highest = 7;
    const CodeSpace space({dimension, dimension}, {});
    CHECK(space.size() == 256);
    CHECK(space.at(0).value == std::vector<std::int32_t>{-8, -8});
    CHECK(space.index_of({{7, 7}}) == 255);
    CHECK(space.allows({{-8, 7}}));
    CHECK_FALSE(space.allows({{-9, 7}}));
}

TEST_CASE("codes of the wrong length, outside a range or forbidden are not allowed") {
    const Forbidden rule{{{0, 2, 3}, {1, 0, 1}}, "would short the supply"};
    const auto space = plain_space({4, 4}, {rule});
    CHECK(space.allows({{1, 0}}));
    CHECK(space.allows({{2, 2}}));
    CHECK_FALSE(space.allows({{2, 1}}));
    CHECK_FALSE(space.allows({{3, 0}}));
    CHECK_FALSE(space.allows({{4, 2}}));
    CHECK_FALSE(space.allows({{1}}));
    CHECK_FALSE(space.allows({{1, 1, 1}}));
}

TEST_CASE("rules that name nothing or unknown dimensions forbid nothing") {
    const auto space = plain_space({4, 4}, {{{}, "empty"}, {{{7, 0, 3}}, "no such dimension"}});
    CHECK(space.allows({{0, 0}}));
}

TEST_CASE("a space without dimensions or with an empty range has no codes") {
    CHECK(CodeSpace().size() == 0);
    Dimension nothing;
    nothing.lowest = 1;
    CHECK(CodeSpace({nothing}, {}).size() == 0);
    CHECK(CodeSpace({nothing}, {}).at(5).value.size() == 1);
}

TEST_CASE("a space too large to count says the largest number") {
    Dimension wide;
    wide.lowest = std::numeric_limits<std::int32_t>::min();
    wide.highest = std::numeric_limits<std::int32_t>::max();
    CHECK(CodeSpace({wide, wide, wide}, {}).size() == std::numeric_limits<std::uint64_t>::max());
}

TEST_CASE("nominal elements come from the table and only from it") {
    const auto space = equalizer_space();
    CHECK(space.find(Part::shunt_capacitor) == 3u);
    CHECK_FALSE(space.find(Part::other));
    CHECK(space.nominal(0, 0) == Approx(2200));
    CHECK(space.nominal(0, 31) == Approx(150));
    CHECK_FALSE(space.nominal(0, 32));
    CHECK_FALSE(space.nominal(0, -1));
    CHECK_FALSE(space.nominal(9, 0));
    CHECK_FALSE(plain_space({4}).nominal(0, 1));
}

TEST_CASE("Codes can be left out of a space one by one, or be the only ones in it") {
    const CodeSpace whole = plain_space({4, 4});
    const Codes one{{1, 2}}, other{{3, 3}};
    const CodeList listed{{one}, false}, only{{one}, true};
    const CodeSpace without(whole.dimensions(), {}, std::make_shared<const CodeList>(listed));
    const CodeSpace alone(whole.dimensions(), {}, std::make_shared<const CodeList>(only));
    CHECK(whole.allows(one));
    CHECK_FALSE(without.allows(one));
    CHECK(without.allows(other));
    CHECK(alone.allows(one));
    CHECK_FALSE(alone.allows(other));
    CHECK(without.size() == whole.size());
}

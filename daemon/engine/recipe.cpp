#include "daemon/engine/recipe.hpp"

#include <algorithm>
#include <charconv>
#include <set>
#include <utility>

namespace lanewright {

namespace {

constexpr std::uint16_t highest_lane = 1023;

std::optional<std::uint16_t> lane_number(std::string_view text) {
    std::uint16_t lane = 0;
    const char* const end = text.data() + text.size();
    const auto [stopped, error] = std::from_chars(text.data(), end, lane);
    if (error != std::errc() || stopped != end || lane > highest_lane) return {};
    return lane;
}

// "3" or "2-5".
std::optional<std::vector<std::uint16_t>> lane_range(std::string_view text) {
    const std::size_t dash = text.find('-');
    const auto first = lane_number(text.substr(0, dash));
    const auto last = dash == std::string_view::npos ? first : lane_number(text.substr(dash + 1));
    if (!first || !last || *first > *last) return {};
    std::vector<std::uint16_t> lanes;
    for (std::uint16_t lane = *first; lane <= *last; ++lane) lanes.push_back(lane);
    return lanes;
}

void decode_lanes(const Node& node, Recipe& recipe) {
    if (node.is_text() && node.text() == "all") return;
    if (!node.is_list()) {
        node.complain(node.described(), "\"all\", or a list such as [0, \"2-5\"]");
        return;
    }
    const List list = node.list();
    if (list.size() == 0) node.complain("an empty list", "at least one lane, or \"all\"");
    std::set<std::uint16_t> lanes;
    for (const Node entry : list) {
        std::vector<std::uint16_t> named;
        if (entry.is_text()) {
            const auto range = lane_range(entry.text());
            if (!range) {
                entry.complain(entry.described(), "lanes such as \"2-5\", 0 to 1023");
                continue;
            }
            named = *range;
        } else {
            named.push_back(static_cast<std::uint16_t>(entry.integer({0, highest_lane})));
        }
        for (const std::uint16_t lane : named) {
            if (!lanes.insert(lane).second) {
                entry.complain("lane " + std::to_string(lane) + " a second time", "each lane once");
                break;
            }
        }
    }
    recipe.lanes = std::vector<std::uint16_t>(lanes.begin(), lanes.end());
}

std::vector<std::string> decode_words(const List& list, const std::string& what) {
    std::vector<std::string> out;
    for (const Node node : list) {
        std::string word = node.text();
        if (node.is_text() && word.empty()) node.complain("an empty name", "the name of a " + what);
        if (!word.empty() && std::find(out.begin(), out.end(), word) != out.end())
            node.complain("a second " + node.described(), "each " + what + " once");
        out.push_back(std::move(word));
    }
    return out;
}

constexpr NumberRange error_ratio_range{.at_most = 0.1, .above = 0};

void decode_required(const Object& object, Required& required) {
    required.error_ratio = object.number("error_ratio", error_ratio_range);
    required.height_mv = object.number("height_mv", {.at_most = 10000, .above = 0});
    required.width_ui = object.number("width_ui", {.at_most = 1, .above = 0});
    object.finish();
}

void decode_strategy(const Object& object, StrategyChoice& strategy) {
    const Node name = object.need("name");
    strategy.name = name.text();
    if (name.is_text() && strategy.name.empty())
        name.complain("an empty name", "the name of a strategy");
    strategy.stride =
        static_cast<std::uint32_t>(object.integer_or("stride", strategy.stride, {1, 65536}));
    strategy.allow_unchanged = object.boolean_or("allow_unchanged", strategy.allow_unchanged);
    object.finish();
}

void decode_budget(const Object& object, BudgetChoice& budget) {
    budget.standard_readings = object.number_or("standard_readings", 0, {.at_least = 0});
    budget.bench_s = object.number_or("bench_s", 0, {.at_least = 0});
    object.finish();
}

void decode_conduct(const Object& top, Recipe& recipe) {
    recipe.dwell_s = top.number_or("dwell_s", recipe.dwell_s, {.at_most = 86400, .above = 0});
    if (const auto verify = top.object_if("verify")) {
        recipe.verify_rounds = static_cast<std::uint32_t>(
            verify->integer_or("rounds", recipe.verify_rounds, {1, 10000}));
        verify->finish();
    }
    recipe.afterwards = static_cast<Afterwards>(top.word_or("afterwards", 0, {"leave", "restore"}));
    recipe.wall_limit_s = top.number_or("wall_limit_s", 0, {.at_least = 0});
    recipe.required_tags = decode_words(top.list_or_empty("required_tags"), "tag");
    recipe.accept_extrapolated = top.boolean_or("accept_extrapolated", false);
    if (const auto seed = top.find("seed"))
        recipe.seed = static_cast<std::uint64_t>(seed->integer({.at_least = 0}));
}

}  // namespace

std::optional<Recipe> load_recipe(const std::string& path, Complaints& complaints) {
    const auto document = Document::load(path, complaints);
    if (!document) return {};
    return decode_recipe(*document, complaints);
}

std::optional<Recipe> decode_recipe(const Document& document, Complaints& complaints) {
    Recipe recipe;
    recipe.path = document.file_name();
    recipe.source = document.source();
    recipe.places = document.places();

    const Object top = document.root().object();
    top.word("format", {"lanewright-recipe/1"});
    const Node name = top.need("name");
    recipe.name = name.text();
    if (name.is_text() && recipe.name.empty()) name.complain("an empty name", "a name");
    recipe.description = top.text_or("description", "");
    if (const auto lanes = top.find("lanes")) decode_lanes(*lanes, recipe);
    const List dimensions = top.list("dimensions");
    recipe.dimensions = decode_words(dimensions, "dimension");
    if (dimensions.node().is_list() && dimensions.size() == 0)
        dimensions.node().complain("an empty list", "at least one dimension of the board");
    decode_required(top.object("required"), recipe.required);
    recipe.search_error_ratio =
        top.number_or("search_error_ratio", recipe.search_error_ratio, error_ratio_range);
    decode_strategy(top.object("strategy"), recipe.strategy);
    if (const auto budget = top.object_if("budget")) decode_budget(*budget, recipe.budget);
    decode_conduct(top, recipe);
    top.finish();

    if (complaints.any_of(recipe.path)) return {};
    return recipe;
}

std::optional<std::vector<std::uint16_t>> parse_lanes(std::string_view text, std::string& why) {
    std::set<std::uint16_t> lanes;
    std::size_t start = 0;
    while (start <= text.size()) {
        const std::size_t comma = std::min(text.find(',', start), text.size());
        const std::string_view part = text.substr(start, comma - start);
        start = comma + 1;
        const auto range = lane_range(part);
        if (!range) {
            why = "found \"" + std::string(part) +
                  "\" in the lanes, expected numbers and ranges from 0 to 1023, such as 0,2-5";
            return {};
        }
        for (const std::uint16_t lane : *range) {
            if (lanes.insert(lane).second) continue;
            why = "found lane " + std::to_string(lane) + " twice, expected each lane once";
            return {};
        }
    }
    return std::vector<std::uint16_t>(lanes.begin(), lanes.end());
}

}  // namespace lanewright

// What a recipe asks of a board, held against what its board file says it can do.
#include <algorithm>
#include <charconv>
#include <cmath>
#include <optional>
#include <utility>

#include "adapt/margin/edge_search.hpp"
#include "daemon/engine/lane_setup.hpp"
#include "daemon/engine/recipe.hpp"
#include "drivers/board/counted_look.hpp"

namespace lanewright {

namespace {

constexpr double longest_dwell_s = 86400;  // as the recipe's decoder takes it

std::string short_number(double value) {
    char buffer[32];
    const auto end =
        std::to_chars(std::begin(buffer), std::end(buffer), value, std::chars_format::general, 6)
            .ptr;
    return std::string(buffer, end);
}

// To three digits, never less than the value itself: a hint that is followed must be enough.
double rounded_up(double value) {
    const double digit = std::pow(10.0, std::floor(std::log10(value)) - 2);
    return std::ceil(value / digit) * digit;
}

class Check {
  public:
    Check(const Recipe& recipe, const BoardFile& board, Complaints& complaints)
        : recipe_(recipe),
          board_(board),
          complaints_(complaints),
          bits_(static_cast<double>(dwell_bits_of(board, recipe))) {}

    void lanes() {
        if (!recipe_.lanes) return;
        const std::uint16_t count = board_.map.lane_count;
        for (const std::uint16_t lane : *recipe_.lanes) {
            if (lane < count) continue;
            complain("/lanes", "lane " + std::to_string(lane),
                     "lanes of board " + board_.name + ", 0 to " + std::to_string(count - 1));
            return;
        }
    }

    void dimensions() {
        std::vector<std::string_view> names;
        for (const DimensionDescription& dimension : board_.dimensions)
            names.push_back(dimension.name);
        for (std::size_t i = 0; i < recipe_.dimensions.size(); ++i)
            one_of("/dimensions/" + std::to_string(i), recipe_.dimensions[i], names,
                   "a dimension of board " + board_.name);
    }

    void strategy(const std::vector<std::string_view>& names) {
        one_of("/strategy/name", recipe_.strategy.name, names, "a strategy");
    }

    void error_ratios() {
        ratio_in_reach("/required/error_ratio", recipe_.required.error_ratio);
        ratio_in_reach("/search_error_ratio", recipe_.search_error_ratio);
        reached_with_this_dwell("/search_error_ratio", recipe_.search_error_ratio);
        if (recipe_.required.error_ratio != recipe_.search_error_ratio) {
            reached_with_this_dwell("/required/error_ratio", recipe_.required.error_ratio);
        }
    }

    void reached_with_this_dwell(const std::string& pointer, double ratio) {
        if (counts(board_)) return counted_with_this_dwell(pointer, ratio);
        shown_by_one_look(pointer, ratio);
    }

    // A counting monitor carries its edges to a ratio that it cannot count, which proves nothing
    // unless the recipe accepts it as proof.
    void counted_with_this_dwell(const std::string& pointer, double ratio) {
        if (recipe_.accept_extrapolated) return;
        const LookGrid grid = LookScale(board_).grid();
        const auto bits = static_cast<std::uint64_t>(bits_);
        const double stated = counted_ratio({ratio, bits}, grid);
        if (stated <= ratio) return;
        const bool proof = ratio == recipe_.required.error_ratio;
        std::string hint = "\"accept_extrapolated\": true";
        if (const auto enough = countable_ratio(grid)) {
            hint += ", or an error ratio of " + short_number(*enough);
        }
        if (const auto longer_s = countable_dwell_s(ratio, grid)) {
            hint += ", or a dwell_s of " + short_number(*longer_s);
        }
        complain(pointer,
                 short_number(ratio) + ", for which a reading of " + short_number(recipe_.dwell_s) +
                     " s counts too few errors: its edges are those at " + short_number(stated) +
                     ", and only extrapolated from there" +
                     (proof ? ", so that no verdict \"meets\" can come of it" : ""),
                 "an error ratio that is counted with this dwell", hint + " would do");
    }

    // Nothing could be read at all.
    void budget() {
        Request reading;
        reading.what = MarginWanted{recipe_.search_error_ratio, static_cast<std::uint64_t>(bits_)};
        const CostModel cost = cost_model_of(board_);
        budget_for("/budget/standard_readings", recipe_.budget.standard_readings,
                   standard_readings(cost, reading), "standard readings");
        budget_for("/budget/bench_s", recipe_.budget.bench_s, cost_s(cost, reading),
                   "s of bench time");
    }

    void shown_by_one_look(const std::string& pointer, double ratio) {
        // Rule of three: with fewer than -ln(0.05) errors expected in a look, a position at the
        // error ratio shows none in more than one look of twenty and passes for error-free.
        const double least_errors = -std::log(0.05);
        const double errors = bits_ * ratio;
        if (errors >= least_errors) return;
        const double longer_s = seconds_for(least_errors / ratio);
        std::string hint = "an error ratio of " + short_number(rounded_up(least_errors / bits_));
        if (longer_s <= longest_dwell_s) hint += " or a dwell_s of " + short_number(longer_s);
        complain(pointer,
                 short_number(ratio) + ", " + short_number(errors) + " errors in a look of " +
                     short_number(bits_) + " bits",
                 "an error ratio of which one look shows about 3 errors", hint + " would do");
    }

    void monitor_range() {
        const MonitorDescription& monitor = board_.monitor;
        // The score takes twice the smaller edge, so each edge must reach half of what is required.
        const double edges = monitor.four_edges ? 2 : 1;
        within_range("/required/height_mv", recipe_.required.height_mv, monitor.height, edges,
                     " mV");
        within_range("/required/width_ui", recipe_.required.width_ui, monitor.width, edges, " UI");
    }

    // What the monitor's sequence writes into fields must fit their limits.
    void parameters() {
        for (const Step& step : board_.monitor.sequence) {
            const auto* write = std::get_if<WriteStep>(&step);
            if (write == nullptr) continue;
            const auto* parameter = std::get_if<Parameter>(&write->value);
            const FieldDescription* field = board_.map.find(write->field);
            if (parameter == nullptr || field == nullptr) continue;
            if (*parameter == Parameter::dwell_log2) dwell_fits(write->field, *field);
            if (*parameter == Parameter::dwell_bits_high) high_bits_fit(write->field, *field);
            if (*parameter == Parameter::ratio_exponent) {
                exponent_fits("/required/error_ratio", recipe_.required.error_ratio, write->field,
                              *field);
                exponent_fits("/search_error_ratio", recipe_.search_error_ratio, write->field,
                              *field);
            }
        }
    }

  private:
    void budget_for(const std::string& pointer, double budget, double each,
                    const std::string& unit) {
        if (budget <= 0 || each <= budget) return;
        complain(pointer, short_number(budget),
                 "at least " + short_number(rounded_up(each)) + " " + unit +
                     ", the cost of one reading with a dwell_s of " + short_number(recipe_.dwell_s),
                 "a search needs many readings: a larger budget, or a shorter dwell_s");
    }

    // The lowest ratio, to three digits, that is counted with the recipe's dwell.
    std::optional<double> countable_ratio(const LookGrid& grid) const {
        const auto bits = static_cast<std::uint64_t>(bits_);
        const auto counted = [&](double log) {
            const double ratio = std::pow(10.0, log);
            return counted_ratio({ratio, bits}, grid) <= ratio;
        };
        const auto log = lowest_that(counted, -18, -2);
        if (!log) return std::nullopt;
        return rounded_up(std::pow(10.0, *log));
    }
    // The shortest dwell, to three digits, with which the ratio is counted.
    std::optional<double> countable_dwell_s(double ratio, const LookGrid& grid) const {
        Recipe longer;
        const auto counted = [&](double log) {
            longer.dwell_s = std::pow(10.0, log);
            return counted_ratio({ratio, dwell_bits_of(board_, longer)}, grid) <= ratio;
        };
        const auto log =
            lowest_that(counted, std::log10(recipe_.dwell_s), std::log10(longest_dwell_s));
        if (!log) return std::nullopt;
        return std::min(rounded_up(std::pow(10.0, *log)), longest_dwell_s);
    }
    // By halving: `holds` is false up to some place and true from there on.
    template <typename Holds>
    static std::optional<double> lowest_that(const Holds& holds, double from, double to) {
        if (!holds(to)) return std::nullopt;
        for (int i = 0; i < 60; ++i) {
            const double middle = (from + to) / 2;
            (holds(middle) ? to : from) = middle;
        }
        return to;
    }

    // A dwell of at least so many bits, in the steps in which the monitor takes it.
    double seconds_for(double bits) const {
        const auto& steps = board_.monitor.sequence;
        const bool power_of_two = std::any_of(steps.begin(), steps.end(), [](const Step& step) {
            const auto* write = std::get_if<WriteStep>(&step);
            return write != nullptr && write->value == Operand(Parameter::dwell_log2);
        });
        if (power_of_two) bits = std::exp2(std::ceil(std::log2(bits)));
        return rounded_up(bits / (board_.bit_rate_gbps * 1e9));
    }

    // The place of the value, or of what it would stand in where it was left at its default.
    void complain(const std::string& pointer, std::string found, std::string expected,
                  std::string hint = {}) {
        std::string at = pointer;
        auto place = recipe_.places.find(at);
        while (place == recipe_.places.end() && !at.empty()) {
            at.erase(at.rfind('/'));
            place = recipe_.places.find(at);
        }
        Complaint complaint{recipe_.path,   0, 0, pointer, std::move(found), std::move(expected),
                            std::move(hint)};
        if (place != recipe_.places.end()) {
            complaint.line = place->second.line;
            complaint.column = place->second.column;
        }
        complaints_.add(std::move(complaint));
    }

    void one_of(const std::string& pointer, const std::string& word,
                const std::vector<std::string_view>& words, const std::string& what) {
        if (std::find(words.begin(), words.end(), word) != words.end()) return;
        std::string expected = what + ":";
        for (const std::string_view candidate : words)
            expected += (candidate == words.front() ? " " : ", ") + std::string(candidate);
        const std::string near = nearest_word(word, words);
        complain(pointer, "\"" + word + "\"", std::move(expected),
                 near.empty() ? "" : "did you mean \"" + near + "\"?");
    }

    void ratio_in_reach(const std::string& pointer, double ratio) {
        const double lowest = board_.monitor.lowest_error_ratio;
        if (ratio >= lowest) return;
        complain(pointer, short_number(ratio),
                 "at least " + short_number(lowest) + ", the lowest that the monitor of board " +
                     board_.name + " latches",
                 "a latched edge cannot be extrapolated to another error ratio");
    }

    void within_range(const std::string& pointer, double required, const StepSize& size,
                      double edges, const std::string& unit) {
        const double reach = edges * size.size * size.most_steps;
        if (required <= reach) return;
        complain(pointer, short_number(required) + unit,
                 "at most " + short_number(reach) + unit + ", the range of the monitor");
    }

    void dwell_fits(const FieldName& name, const FieldDescription& field) {
        const double exponent = std::log2(bits_);
        if (exponent >= field.lowest_allowed() && exponent <= field.highest_allowed()) return;
        const auto seconds = [&](std::uint32_t log2) {
            return short_number(std::ldexp(1.0, static_cast<int>(std::min(log2, 64u))) /
                                (board_.bit_rate_gbps * 1e9));
        };
        complain("/dwell_s", short_number(recipe_.dwell_s),
                 "from " + seconds(field.lowest_allowed()) + " to " +
                     seconds(field.highest_allowed()) + " s, the limits of " + name.text());
    }

    void high_bits_fit(const FieldName& name, const FieldDescription& field) {
        if (bits_ < std::ldexp(static_cast<double>(field.highest_allowed()) + 1, 32)) return;
        complain("/dwell_s", short_number(recipe_.dwell_s),
                 "a dwell whose bits fit into " + name.text());
    }

    void exponent_fits(const std::string& pointer, double ratio, const FieldName& name,
                       const FieldDescription& field) {
        const double exponent = -std::log10(ratio);
        const double whole = std::round(exponent);
        const bool power_of_ten = std::abs(exponent - whole) < 1e-9;
        if (power_of_ten && whole >= field.lowest_allowed() && whole <= field.highest_allowed())
            return;
        complain(pointer, short_number(ratio),
                 "a power of ten from 1e-" + std::to_string(field.highest_allowed()) + " to 1e-" +
                     std::to_string(field.lowest_allowed()) + ", which is what " + name.text() +
                     " can be set to");
    }

    const Recipe& recipe_;
    const BoardFile& board_;
    Complaints& complaints_;
    double bits_;  // of one look
};

}  // namespace

void check_recipe_against_board(const Recipe& recipe, const BoardFile& board,
                                const std::vector<std::string_view>& strategy_names,
                                Complaints& complaints) {
    Check check(recipe, board, complaints);
    check.lanes();
    check.dimensions();
    check.strategy(strategy_names);
    check.error_ratios();
    check.budget();
    check.monitor_range();
    check.parameters();
}

void check_recipe_for_replay(const Recipe& recipe, const BoardFile& board,
                             const std::vector<std::string_view>& strategy_names,
                             Complaints& complaints) {
    Check check(recipe, board, complaints);
    check.dimensions();
    check.strategy(strategy_names);
}

}  // namespace lanewright

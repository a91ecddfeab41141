#include "daemon/replay/csv_cells.hpp"

#include <algorithm>
#include <charconv>
#include <cmath>

namespace lanewright {

namespace {

constexpr const char* plain_number = "a number such as -12.5 or 1e-6";

// What people and spreadsheets write that is not one number everywhere.
std::string why_no_number(std::string_view text) {
    const auto digit = [](char c) { return c >= '0' && c <= '9'; };
    const bool digits = std::any_of(text.begin(), text.end(), digit);
    if (digits && text.find_first_of(", '_") != std::string_view::npos) {
        return "found " + shown(text) + ", expected " + plain_number +
               ": decimal commas and thousands separators are refused, as they can be either";
    }
    return "found " + shown(text) + ", expected " + plain_number;
}

template <class Number>
bool parse(std::string_view text, Number& value) {
    if (text.starts_with('+')) text.remove_prefix(1);
    const char* const end = text.data() + text.size();
    const auto [stopped, error] = std::from_chars(text.data(), end, value);
    return error == std::errc() && stopped == end && !text.empty() && !text.starts_with('+');
}

}  // namespace

std::string shown(std::string_view text) {
    constexpr std::size_t most = 40;
    if (text.size() <= most) return "\"" + std::string(text) + "\"";
    // Not in the middle of a character.
    std::size_t cut = most;
    while (cut > 0 && (static_cast<unsigned char>(text[cut]) & 0xC0) == 0x80) --cut;
    return "\"" + std::string(text.substr(0, cut)) + "...\"";
}

std::string_view Cells::text(const std::string& column) const {
    std::string_view text = fields_[header_.at(column)];
    while (!text.empty() && (text.front() == ' ' || text.front() == '\t')) text.remove_prefix(1);
    while (!text.empty() && (text.back() == ' ' || text.back() == '\t')) text.remove_suffix(1);
    return text;
}

double Cells::number(const std::string& column) const {
    const std::string_view found = text(column);
    double value = 0;
    if (found.empty()) throw BadRow(column, std::string("nothing, expected ") + plain_number);
    if (!parse(found, value)) throw BadRow(column, why_no_number(found));
    if (!std::isfinite(value)) {
        throw BadRow(column, "found " + shown(found) + ", expected a finite number");
    }
    return value;
}

std::int64_t Cells::integer(const std::string& column, std::int64_t lowest,
                            std::int64_t highest) const {
    const std::string_view found = text(column);
    const std::string expected =
        "a whole number from " + std::to_string(lowest) + " to " + std::to_string(highest);
    std::int64_t value = 0;
    if (found.empty()) throw BadRow(column, "nothing, expected " + expected);
    if (!parse(found, value) || value < lowest || value > highest) {
        throw BadRow(column, "found " + shown(found) + ", expected " + expected);
    }
    return value;
}

std::size_t Cells::word(const std::string& column,
                        const std::vector<std::string_view>& words) const {
    const std::string_view found = text(column);
    const auto at = std::find(words.begin(), words.end(), found);
    if (at != words.end()) return static_cast<std::size_t>(at - words.begin());
    std::string expected;
    for (const std::string_view word : words) {
        expected += (expected.empty() ? "" : ", ") + std::string(word);
    }
    throw BadRow(column, "found " + shown(found) + ", expected one of " + expected);
}

}  // namespace lanewright

#pragma once
// Purpose:   the parsed file behind Document: every value with its place. Private to this folder.
// Ownership: a JsonTree owns its values; they keep their addresses as long as it lives.
// Threads:   one thread at a time.

#include <cstddef>
#include <cstdint>
#include <deque>
#include <memory>
#include <string>
#include <string_view>
#include <vector>

#include "drivers/config/json_reader.hpp"

namespace lanewright::detail {

enum class JsonKind : std::uint8_t {
    missing,  // nothing there, or something already complained of: getters stay silent
    null,
    boolean,
    integer,
    number,
    text,
    list,
    object
};

struct JsonValue {
    JsonKind kind = JsonKind::missing;
    bool boolean = false;
    std::int64_t integer = 0;
    double number = 0;  // of integers too
    std::string text;
    std::vector<const JsonValue*> children;  // in the order of the file

    const JsonValue* parent = nullptr;
    std::string key;        // in an object
    std::size_t index = 0;  // in a list
    std::size_t offset = 0, key_offset = 0;
};

struct JsonTree {
    std::string file_name;
    std::string source;
    std::size_t start = 0;  // behind a byte order mark
    Complaints* complaints = nullptr;
    std::deque<JsonValue> values;
    JsonValue missing;
    const JsonValue* root = nullptr;
    std::vector<std::size_t> line_starts;

    Place place_of(std::size_t offset) const;
    // A complaint with file, line and column of that offset, and this pointer.
    void complain(std::size_t offset, std::string pointer, std::string found, std::string expected,
                  std::string hint) const;
};

std::string pointer_of(const JsonValue& value);

// Text between double quotes, cut to a readable length at a character boundary, control
// characters replaced: what it holds may come from any file.
std::string in_quotes(std::string_view text);

// Parses tree.source into tree.root. False on a syntax error, which has been complained of;
// duplicate keys and integers that do not fit are complained of and parsing goes on.
bool parse_into(JsonTree& tree);

}  // namespace lanewright::detail

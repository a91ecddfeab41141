#include "drivers/config/json_reader.hpp"

#include <algorithm>
#include <cctype>
#include <cerrno>
#include <charconv>
#include <cmath>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <system_error>
#include <tuple>
#include <utility>

#include "drivers/config/json_tree.hpp"

namespace lanewright {

using detail::in_quotes;
using detail::JsonKind;
using detail::JsonValue;

namespace {

constexpr std::uintmax_t largest_file_bytes = std::uintmax_t{16} << 20;
constexpr std::size_t longest_quote = 40;
constexpr double largest_whole_double = 9007199254740992.0;  // 2^53: all integers up to here exist

std::string number_text(double value) {
    char buffer[32];
    const auto end = std::to_chars(std::begin(buffer), std::end(buffer), value).ptr;
    return std::string(buffer, end);
}

std::string range_text(const NumberRange& range) {
    const bool above = std::isfinite(range.above);
    const bool from = std::isfinite(range.at_least);
    const bool to = std::isfinite(range.at_most);
    std::string out = "a number";
    if (above)
        out += " above " + number_text(range.above);
    else if (from && to)
        return out + " from " + number_text(range.at_least) + " to " + number_text(range.at_most);
    else if (from)
        out += " of at least " + number_text(range.at_least);
    if (to) out += (above ? " and at most " : " of at most ") + number_text(range.at_most);
    return out;
}

std::string range_text(const IntegerRange& range) {
    const bool from = range.at_least != std::numeric_limits<std::int64_t>::min();
    const bool to = range.at_most != std::numeric_limits<std::int64_t>::max();
    if (from && to)
        return "an integer from " + std::to_string(range.at_least) + " to " +
               std::to_string(range.at_most);
    if (from) return "an integer of at least " + std::to_string(range.at_least);
    if (to) return "an integer of at most " + std::to_string(range.at_most);
    return "an integer";
}

bool within(const NumberRange& range, double value) {
    return value >= range.at_least && value <= range.at_most && value > range.above;
}

std::string words_text(const std::vector<std::string_view>& words) {
    if (words.empty()) return "nothing";
    std::string out = words.size() == 1 ? "" : "one of ";
    for (std::size_t i = 0; i < words.size(); ++i) {
        if (i > 0) out += ", ";
        out += in_quotes(words[i]);
    }
    return out;
}

std::string did_you_mean(const std::string& word) {
    return word.empty() ? std::string() : "did you mean " + in_quotes(word) + "?";
}

// "0x1F4" as a number; empty unless all of it is one.
std::optional<std::int64_t> from_hex(std::string_view text) {
    if (text.size() < 3 || text[0] != '0' || (text[1] != 'x' && text[1] != 'X')) return {};
    std::uint64_t value = 0;
    const char* const end = text.data() + text.size();
    const auto [stopped, error] = std::from_chars(text.data() + 2, end, value, 16);
    if (error != std::errc() || stopped != end) return {};
    if (value > static_cast<std::uint64_t>(std::numeric_limits<std::int64_t>::max())) return {};
    return static_cast<std::int64_t>(value);
}

// Letters that must be put in, left out, changed or swapped with their neighbour to make one
// word of the other (optimal string alignment), case ignored.
std::size_t edit_distance(std::string_view a, std::string_view b) {
    const auto same = [](char x, char y) {
        return std::tolower(static_cast<unsigned char>(x)) ==
               std::tolower(static_cast<unsigned char>(y));
    };
    std::vector<std::size_t> two_back(b.size() + 1), back(b.size() + 1), row(b.size() + 1);
    for (std::size_t j = 0; j <= b.size(); ++j) row[j] = j;
    for (std::size_t i = 1; i <= a.size(); ++i) {
        two_back.swap(back);
        back.swap(row);
        row[0] = i;
        for (std::size_t j = 1; j <= b.size(); ++j) {
            const std::size_t changed = back[j - 1] + (same(a[i - 1], b[j - 1]) ? 0 : 1);
            row[j] = std::min({back[j] + 1, row[j - 1] + 1, changed});
            if (i > 1 && j > 1 && same(a[i - 1], b[j - 2]) && same(a[i - 2], b[j - 1]))
                row[j] = std::min(row[j], two_back[j - 2] + 1);
        }
    }
    return row[b.size()];
}

}  // namespace

std::string detail::in_quotes(std::string_view text) {
    std::string out = "\"";
    std::size_t shown = 0;
    for (const char c : text) {
        const bool starts_character = (static_cast<unsigned char>(c) & 0xC0u) != 0x80u;
        if (starts_character && shown++ == longest_quote) {
            out += "...";
            break;
        }
        const bool control = static_cast<unsigned char>(c) < 0x20 || c == 0x7F;
        out += control ? '?' : c;
    }
    return out + "\"";
}

std::string nearest_word(std::string_view word, const std::vector<std::string_view>& candidates) {
    // Beyond this length nobody mistyped a key, and the table would grow with the input.
    constexpr std::size_t longest_word = 64;
    if (word.empty() || word.size() > longest_word) return {};
    const std::size_t most = std::max<std::size_t>(1, word.size() / 3);
    std::string_view best;
    std::size_t best_distance = most + 1;
    for (const std::string_view candidate : candidates) {
        if (candidate.size() > longest_word) continue;
        const std::size_t distance = edit_distance(word, candidate);
        if (distance < best_distance && distance < word.size()) {
            best = candidate;
            best_distance = distance;
        }
    }
    return std::string(best);
}

// ---- complaints

std::string Complaint::text() const {
    std::string out = file;
    if (line > 0) out += ":" + std::to_string(line) + ":" + std::to_string(column);
    out += ": ";
    if (!pointer.empty()) out += pointer + ": ";
    out += "found " + found + ", expected " + expected;
    if (!hint.empty()) out += "; " + hint;
    return out;
}

void Complaints::add(Complaint complaint) {
    all_.push_back(std::move(complaint));
}

bool Complaints::any_of(const std::string& file) const {
    return std::any_of(all_.begin(), all_.end(),
                       [&file](const Complaint& complaint) { return complaint.file == file; });
}

std::string Complaints::text() const {
    std::vector<Complaint> sorted = all_;
    std::stable_sort(sorted.begin(), sorted.end(), [](const Complaint& a, const Complaint& b) {
        return std::tie(a.file, a.line, a.column) < std::tie(b.file, b.line, b.column);
    });
    std::string out;
    for (const Complaint& complaint : sorted) out += complaint.text() + "\n";
    return out;
}

// ---- Node

bool Node::is_object() const {
    return value_->kind == JsonKind::object;
}
bool Node::is_list() const {
    return value_->kind == JsonKind::list;
}
bool Node::is_text() const {
    return value_->kind == JsonKind::text;
}
bool Node::is_number() const {
    return value_->kind == JsonKind::number || value_->kind == JsonKind::integer;
}
bool Node::is_null() const {
    return value_->kind == JsonKind::null || value_->kind == JsonKind::missing;
}

std::string Node::pointer() const {
    return detail::pointer_of(*value_);
}
std::size_t Node::line() const {
    return tree_->place_of(value_->offset).line;
}
std::size_t Node::column() const {
    return tree_->place_of(value_->offset).column;
}

void Node::complain(std::string found, std::string expected, std::string hint) const {
    // What is missing has been complained of already: one mistake, one complaint.
    if (value_->kind == JsonKind::missing) return;
    tree_->complain(value_->offset, pointer(), std::move(found), std::move(expected),
                    std::move(hint));
}

std::string Node::described() const {
    switch (value_->kind) {
        case JsonKind::missing:
            return "nothing";
        case JsonKind::null:
            return "null";
        case JsonKind::boolean:
            return value_->boolean ? "true" : "false";
        case JsonKind::integer:
            return std::to_string(value_->integer);
        case JsonKind::number:
            return number_text(value_->number);
        case JsonKind::text:
            return in_quotes(value_->text);
        case JsonKind::list:
            return "a list of " + std::to_string(value_->children.size());
        case JsonKind::object:
            return "an object";
    }
    return "nothing";
}

Object Node::object() const {
    if (is_object()) return Object(*this);
    complain(described(), "an object");
    return Object(Node(tree_, &tree_->missing));
}

List Node::list() const {
    if (is_list()) return List(*this);
    complain(described(), "a list");
    return List(Node(tree_, &tree_->missing));
}

std::string Node::text() const {
    if (is_text()) return value_->text;
    complain(described(), "text", is_number() ? "write it in double quotes" : "");
    return {};
}

bool Node::boolean() const {
    if (value_->kind == JsonKind::boolean) return value_->boolean;
    complain(described(), "true or false", is_text() ? "write it without quotes" : "");
    return false;
}

double Node::number(NumberRange range) const {
    if (is_number() && within(range, value_->number)) return value_->number;
    complain(described(), range_text(range), is_text() ? "write a number without quotes" : "");
    return std::clamp(0.0, std::min(range.at_least, range.at_most), range.at_most);
}

std::int64_t Node::integer(IntegerRange range) const {
    std::optional<std::int64_t> value;
    std::string hint;
    if (value_->kind == JsonKind::integer) value = value_->integer;
    // 8.0 is an integer to JSON Schema, and to whatever program wrote the file.
    if (value_->kind == JsonKind::number && std::abs(value_->number) <= largest_whole_double &&
        value_->number == std::floor(value_->number))
        value = static_cast<std::int64_t>(value_->number);
    if (is_text()) {
        value = from_hex(value_->text);
        if (!value) hint = "write a number without quotes, or a hexadecimal one like \"0x1F4\"";
    }
    if (value && *value >= range.at_least && *value <= range.at_most) return *value;
    complain(described(), range_text(range), hint);
    return std::clamp<std::int64_t>(0, std::min(range.at_least, range.at_most), range.at_most);
}

std::size_t Node::word(const std::vector<std::string_view>& words) const {
    if (is_text()) {
        const auto at = std::find(words.begin(), words.end(), value_->text);
        if (at != words.end()) return static_cast<std::size_t>(at - words.begin());
        complain(described(), words_text(words), did_you_mean(nearest_word(value_->text, words)));
        return 0;
    }
    complain(described(), words_text(words));
    return 0;
}

// ---- Object

std::optional<Node> Object::find(std::string_view key) const {
    asked_->emplace(key);
    for (const JsonValue* child : node_.value_->children) {
        if (child->key == key) return Node(node_.tree_, child);
    }
    return {};
}

bool Object::has(std::string_view key) const {
    return find(key).has_value();
}

Node Object::need(std::string_view key) const {
    if (const auto found = find(key)) return *found;
    node_.complain("no " + in_quotes(key), "this key, it is required");
    return Node(node_.tree_, &node_.tree_->missing);
}

std::string Object::text(std::string_view key) const {
    return need(key).text();
}

std::string Object::text_or(std::string_view key, std::string_view otherwise) const {
    const auto found = find(key);
    return found ? found->text() : std::string(otherwise);
}

bool Object::boolean_or(std::string_view key, bool otherwise) const {
    const auto found = find(key);
    return found ? found->boolean() : otherwise;
}

double Object::number(std::string_view key, NumberRange range) const {
    return need(key).number(range);
}

double Object::number_or(std::string_view key, double otherwise, NumberRange range) const {
    const auto found = find(key);
    return found ? found->number(range) : otherwise;
}

std::int64_t Object::integer(std::string_view key, IntegerRange range) const {
    return need(key).integer(range);
}

std::int64_t Object::integer_or(std::string_view key, std::int64_t otherwise,
                                IntegerRange range) const {
    const auto found = find(key);
    return found ? found->integer(range) : otherwise;
}

std::size_t Object::word(std::string_view key, const std::vector<std::string_view>& words) const {
    return need(key).word(words);
}

std::size_t Object::word_or(std::string_view key, std::size_t otherwise,
                            const std::vector<std::string_view>& words) const {
    const auto found = find(key);
    return found ? found->word(words) : otherwise;
}

Object Object::object(std::string_view key) const {
    return need(key).object();
}

std::optional<Object> Object::object_if(std::string_view key) const {
    const auto found = find(key);
    if (!found) return {};
    return found->object();
}

List Object::list(std::string_view key) const {
    return need(key).list();
}

List Object::list_or_empty(std::string_view key) const {
    const auto found = find(key);
    return found ? found->list() : List(Node(node_.tree_, &node_.tree_->missing));
}

std::vector<std::string> Object::keys() const {
    std::vector<std::string> out;
    for (const JsonValue* child : node_.value_->children) {
        out.push_back(child->key);
        asked_->insert(child->key);
    }
    return out;
}

void Object::finish() const {
    const std::vector<std::string_view> known(asked_->begin(), asked_->end());
    std::vector<std::string_view> absent;  // a misspelt key stands in for one of these
    for (const std::string_view key : known) {
        const auto& children = node_.value_->children;
        if (std::none_of(children.begin(), children.end(),
                         [key](const JsonValue* child) { return child->key == key; }))
            absent.push_back(key);
    }
    // A file with thousands of them is another kind of file; nobody reads that many complaints.
    constexpr std::size_t most_named = 20;
    std::size_t unknown = 0;
    for (const JsonValue* child : node_.value_->children) {
        if (asked_->contains(child->key)) continue;
        if (++unknown > most_named) continue;
        std::string near = nearest_word(child->key, absent);
        if (near.empty()) near = nearest_word(child->key, known);
        node_.tree_->complain(child->key_offset, detail::pointer_of(*child),
                              "an unknown key " + in_quotes(child->key), words_text(known),
                              did_you_mean(near));
    }
    if (unknown > most_named) {
        node_.complain(std::to_string(unknown) + " unknown keys", words_text(known),
                       "only the first " + std::to_string(most_named) + " are named");
    }
}

// ---- List

std::size_t List::size() const {
    return node_.value_->children.size();
}

Node List::at(std::size_t index) const {
    const auto& children = node_.value_->children;
    if (index < children.size()) return Node(node_.tree_, children[index]);
    return Node(node_.tree_, &node_.tree_->missing);
}

std::vector<double> List::numbers(NumberRange range) const {
    std::vector<double> out;
    for (const Node node : *this) out.push_back(node.number(range));
    return out;
}

std::vector<std::string> List::texts() const {
    std::vector<std::string> out;
    for (const Node node : *this) out.push_back(node.text());
    return out;
}

// ---- Document

Document::Document(std::unique_ptr<detail::JsonTree> tree) : tree_(std::move(tree)) {}
Document::Document(Document&&) noexcept = default;
Document& Document::operator=(Document&&) noexcept = default;
Document::~Document() = default;

std::optional<Document> Document::load(const std::string& path, Complaints& complaints) {
    const auto refuse = [&](std::string found, std::string expected, std::string hint = {}) {
        complaints.add({path, 0, 0, {}, std::move(found), std::move(expected), std::move(hint)});
        return std::nullopt;
    };
    std::error_code error;
    const auto status = std::filesystem::status(path, error);
    if (!std::filesystem::exists(status)) {
        return refuse(error ? error.message() : "no such file", "a readable JSON file");
    }
    // A pipe could keep us waiting for ever, and a device has no end.
    if (std::filesystem::is_directory(status)) return refuse("a directory", "a JSON file");
    if (!std::filesystem::is_regular_file(status))
        return refuse("a pipe or device", "a regular file");
    const auto too_large = [&] {
        return refuse("more than 16 MiB", "a JSON file of at most 16 MiB");
    };
    if (std::filesystem::file_size(path, error) > largest_file_bytes && !error) return too_large();

    std::ifstream in(path, std::ios::binary);
    if (!in) return refuse(std::generic_category().message(errno), "a readable JSON file");
    std::string text;
    char block[65536];
    while (in.read(block, sizeof block) || in.gcount() > 0) {
        text.append(block, static_cast<std::size_t>(in.gcount()));
        if (text.size() > largest_file_bytes) return too_large();
    }
    if (in.bad()) return refuse("a read error", "a readable JSON file");
    return parse(std::move(text), path, complaints);
}

std::optional<Document> Document::parse(std::string text, const std::string& file_name,
                                        Complaints& complaints) {
    auto tree = std::make_unique<detail::JsonTree>();
    tree->file_name = file_name;
    tree->source = std::move(text);
    tree->complaints = &complaints;
    if (!detail::parse_into(*tree)) return {};
    return Document(std::move(tree));
}

Node Document::root() const {
    return Node(tree_.get(), tree_->root);
}
const std::string& Document::source() const {
    return tree_->source;
}
const std::string& Document::file_name() const {
    return tree_->file_name;
}

std::map<std::string, Place> Document::places() const {
    std::map<std::string, Place> out;
    for (const JsonValue& value : tree_->values) {
        out.emplace(detail::pointer_of(value), tree_->place_of(value.offset));
    }
    return out;
}

}  // namespace lanewright

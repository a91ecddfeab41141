#include <algorithm>
#include <iterator>
#include <nlohmann/json.hpp>
#include <optional>
#include <unordered_set>
#include <utility>

#include "drivers/config/json_tree.hpp"

namespace lanewright::detail {

namespace {

constexpr std::size_t deepest_nesting = 64;

// Tells how far the lexer has read. All copies share one counter.
class CountingIterator {
  public:
    using iterator_category = std::input_iterator_tag;
    using value_type = char;
    using difference_type = std::ptrdiff_t;
    using pointer = const char*;
    using reference = const char&;

    CountingIterator(const char* at, std::size_t* consumed) : at_(at), consumed_(consumed) {}
    reference operator*() const { return *at_; }
    CountingIterator& operator++() {
        ++at_;
        ++*consumed_;
        return *this;
    }
    CountingIterator operator++(int) {
        CountingIterator before = *this;
        ++*this;
        return before;
    }
    bool operator==(const CountingIterator& other) const { return at_ == other.at_; }
    bool operator!=(const CountingIterator& other) const { return at_ != other.at_; }

  private:
    const char* at_;
    std::size_t* consumed_;
};

bool is_space(char c) {
    return c == ' ' || c == '\t' || c == '\n' || c == '\r';
}

bool is_number_character(char c) {
    return (c >= '0' && c <= '9') || c == '+' || c == '-' || c == '.' || c == 'e' || c == 'E';
}

bool starts_with_at(const std::string& text, std::size_t at, std::string_view what) {
    return text.compare(at, what.size(), what) == 0;
}

struct SyntaxError {
    std::size_t offset = 0;
    std::string found, expected, hint;
};

// The word or sign at `at`, as it reads in a message.
std::string token_at(const std::string& text, std::size_t at) {
    if (at >= text.size()) return "the end of the file";
    std::size_t end = at + 1;
    if (text[at] == '"') {
        while (end < text.size() && text[end] != '"' && text[end] != '\n') ++end;
        return in_quotes(std::string_view(text).substr(at + 1, end - at - 1));
    }
    const auto in_word = [](char c) {
        return !is_space(c) && std::string_view(",:{}[]\"").find(c) == std::string_view::npos;
    };
    if (in_word(text[at])) {
        while (end < text.size() && in_word(text[end])) ++end;
    }
    std::string shown = in_quotes(std::string_view(text).substr(at, end - at));
    shown.front() = shown.back() = '\'';
    return shown;
}

char last_sign_before(const std::string& text, std::size_t at) {
    while (at > 0 && is_space(text[at - 1])) --at;
    return at > 0 ? text[at - 1] : '\0';
}

// What people most often mean by the JSON they get wrong.
std::string syntax_hint(const std::string& text, std::size_t at, const std::string& message) {
    if (at >= text.size()) return "is a closing bracket, brace or quote missing?";
    const char sign = text[at];
    const char before = last_sign_before(text, at);
    if (message.find("number overflow") != std::string::npos) return "the number is too large";
    if (starts_with_at(text, at, "//") || starts_with_at(text, at, "/*") || sign == '#')
        return "JSON has no comments; use a \"description\"";
    if (sign == '\'') return "JSON strings stand between double quotes";
    if ((sign == '}' || sign == ']') && before == ',') return "remove the comma before it";
    if (starts_with_at(text, at, "NaN") || starts_with_at(text, at, "nan") ||
        starts_with_at(text, at, "Inf") || starts_with_at(text, at, "-Inf"))
        return "JSON has only finite numbers";
    if (starts_with_at(text, at, "True") || starts_with_at(text, at, "False") ||
        starts_with_at(text, at, "None"))
        return "write true, false or null";
    if (before == '0' && (sign == 'x' || sign == 'X'))
        return "write hexadecimal numbers in double quotes";
    const bool list_or_object_goes_on = message.find("; expected '}'") != std::string::npos ||
                                        message.find("; expected ']'") != std::string::npos;
    if (list_or_object_goes_on && before != ',' && (sign == '"' || sign == '{' || sign == '['))
        return "is a comma missing before it?";
    return {};
}

std::string what_was_expected(const std::string& message) {
    if (message.find("ill-formed UTF-8") != std::string::npos) return "valid UTF-8";
    if (message.find("control character") != std::string::npos)
        return "no control character inside a string (write \\n, \\t, \\u....)";
    if (message.find("forbidden character after backslash") != std::string::npos)
        return "one of \\\" \\\\ \\/ \\b \\f \\n \\r \\t \\u after a backslash";
    if (message.find("missing closing quote") != std::string::npos) return "a closing quote";
    if (message.find("surrogate") != std::string::npos ||
        message.find("'\\u' must be followed") != std::string::npos)
        return "four hexadecimal digits of a valid character after \\u";
    if (message.find("number overflow") != std::string::npos) return "a finite number";
    if (message.find("invalid number") != std::string::npos) return "a number as JSON writes it";
    if (message.find("; expected end of input") != std::string::npos) return "the end of the file";
    if (message.find("while parsing object key") != std::string::npos)
        return "a key in double quotes";
    if (message.find("while parsing object separator") != std::string::npos)
        return "':' after the key";
    if (message.find("; expected '}'") != std::string::npos) return "',' or '}'";
    if (message.find("; expected ']'") != std::string::npos) return "',' or ']'";
    return "a JSON value";
}

class TreeBuilder {
  public:
    TreeBuilder(JsonTree& tree, const std::size_t& consumed)
        : tree_(tree), consumed_(consumed), cursor_(tree.start) {}

    bool null() { return add(JsonKind::null) != nullptr; }
    bool boolean(bool value) {
        add(JsonKind::boolean)->boolean = value;
        return true;
    }
    bool number_integer(std::int64_t value) {
        JsonValue* made = add(JsonKind::integer);
        made->integer = value;
        made->number = static_cast<double>(value);
        return true;
    }
    bool number_unsigned(std::uint64_t value) {
        if (value > static_cast<std::uint64_t>(std::numeric_limits<std::int64_t>::max()))
            return integer_too_large();
        return number_integer(static_cast<std::int64_t>(value));
    }
    bool number_float(double value, const std::string& written) {
        if (written.find_first_of(".eE") == std::string::npos) return integer_too_large();
        add(JsonKind::number)->number = value;
        return true;
    }
    bool string(std::string& value) {
        add(JsonKind::text)->text = std::move(value);
        return true;
    }
    bool binary(nlohmann::json::binary_t&) { return false; }  // never called for text
    bool start_object(std::size_t) { return open(JsonKind::object); }
    bool start_array(std::size_t) { return open(JsonKind::list); }
    bool end_object() { return close(); }
    bool end_array() { return close(); }

    bool key(std::string& name) {
        key_offset_ = next_token();
        cursor_ = tree_.start + consumed_;
        key_ = std::move(name);
        key_is_double_ = !keys_.back().insert(key_).second;
        if (key_is_double_) {
            std::string pointer = pointer_of(*open_.back()) + "/" + escaped(key_);
            tree_.complain(key_offset_, std::move(pointer), "a second " + in_quotes(key_),
                           "each key once", "remove one of the two");
        }
        return true;
    }

    bool parse_error(std::size_t, const std::string& token, const nlohmann::json::exception& why) {
        const std::string message = why.what();
        SyntaxError error;
        error.offset = offset_of(token, message);
        error.found = token_at(tree_.source, error.offset);
        if (message.find("invalid string") != std::string::npos &&
            error.offset < tree_.source.size()) {
            const auto byte = static_cast<unsigned char>(tree_.source[error.offset]);
            if (byte < 0x20 || byte >= 0x7F) error.found = byte_text(byte);
        }
        error.expected = what_was_expected(message);
        error.hint = syntax_hint(tree_.source, error.offset, message);
        const std::string pointer = open_.empty() ? "" : pointer_of(*open_.back());
        tree_.complain(error.offset, pointer, error.found, error.expected, error.hint);
        return false;
    }

    static std::string escaped(const std::string& key) {  // RFC 6901, section 3
        std::string out;
        for (const char c : key) {
            if (c == '~')
                out += "~0";
            else if (c == '/')
                out += "~1";
            else
                out += c;
        }
        return out;
    }

  private:
    static std::string byte_text(unsigned char byte) {
        static constexpr char digits[] = "0123456789ABCDEF";
        return std::string("the byte 0x") + digits[byte >> 4] + digits[byte & 0xF];
    }

    // The first character behind the previous token that belongs to one.
    std::size_t next_token() const {
        const std::string& text = tree_.source;
        std::size_t at = cursor_;
        while (at < text.size() && (is_space(text[at]) || text[at] == ',' || text[at] == ':')) ++at;
        return at;
    }

    // Where the token that the parser stumbled over begins. Inside a string it is the bad byte
    // itself, the last one read.
    std::size_t offset_of(const std::string& token, const std::string& message) const {
        const std::string& text = tree_.source;
        const std::size_t read_end = tree_.start + consumed_;
        if (message.find("unexpected end of input") != std::string::npos) return text.size();
        if (message.find("invalid string") != std::string::npos) {
            if (message.find("missing closing quote") != std::string::npos) return text.size();
            // A sequence broken off by plain text: the byte that began it is the wrong one.
            const bool plain = static_cast<unsigned char>(text[read_end - 1]) < 0x80;
            const bool broken_off = message.find("ill-formed UTF-8") != std::string::npos && plain;
            return read_end - (broken_off && consumed_ > 1 ? 2 : 1);
        }
        if (message.find("invalid literal") != std::string::npos ||
            message.find("invalid number") != std::string::npos)
            return std::min(next_token(), text.size());
        // Signs and words end where the lexer stands. Only of strings and numbers does it tell the
        // text, and it has read one character beyond a number.
        const std::size_t sign = message.find("unexpected '");
        if (sign != std::string::npos) return read_end - 1;
        for (const std::string_view word : {"true", "false", "null"}) {
            if (message.find("unexpected " + std::string(word)) != std::string::npos)
                return read_end - word.size();
        }
        for (std::size_t beyond = 0; beyond <= 1; ++beyond) {
            const std::size_t length = token.size() + beyond;
            if (length <= consumed_ && starts_with_at(text, read_end - length, token))
                return read_end - length;
        }
        return std::min(next_token(), text.size());
    }

    bool integer_too_large() {
        JsonValue* made = add(JsonKind::missing);
        std::size_t end = made->offset;
        while (end < tree_.source.size() && is_number_character(tree_.source[end])) ++end;
        std::string found = tree_.source.substr(made->offset, end - made->offset);
        if (found.size() > 40) found = found.substr(0, 40) + "...";
        tree_.complain(made->offset, pointer_of(*made), found,
                       "an integer from -9223372036854775808 to 9223372036854775807", {});
        return true;
    }

    JsonValue* add(JsonKind kind) {
        JsonValue& made = tree_.values.emplace_back();
        made.kind = kind;
        made.offset = next_token();
        // A number's end is its last character; everything else ends where the lexer stands.
        cursor_ = made.offset;
        const std::string& text = tree_.source;
        if (cursor_ < text.size() && is_number_character(text[cursor_]) && text[cursor_] != 'e') {
            while (cursor_ < text.size() && is_number_character(text[cursor_])) ++cursor_;
        } else {
            cursor_ = tree_.start + consumed_;
        }
        if (open_.empty()) {
            tree_.root = &made;
            return &made;
        }
        JsonValue* parent = open_.back();
        made.parent = parent;
        if (parent->kind == JsonKind::object) {
            made.key = std::move(key_);
            made.key_offset = key_offset_;
            if (key_is_double_) return &made;  // the first one stays
        } else {
            made.index = parent->children.size();
        }
        parent->children.push_back(&made);
        return &made;
    }

    bool open(JsonKind kind) {
        JsonValue* made = add(kind);
        open_.push_back(made);
        keys_.emplace_back();
        if (open_.size() <= deepest_nesting) return true;
        tree_.complain(made->offset, {},
                       "more than " + std::to_string(deepest_nesting) + " levels of brackets",
                       "at most " + std::to_string(deepest_nesting), {});
        return false;
    }

    bool close() {
        cursor_ = tree_.start + consumed_;
        open_.pop_back();
        keys_.pop_back();
        return true;
    }

    JsonTree& tree_;
    const std::size_t& consumed_;  // characters the lexer has read
    std::size_t cursor_;           // end of the previous token
    std::vector<JsonValue*> open_;
    std::vector<std::unordered_set<std::string>> keys_;  // of each open value
    std::string key_;
    std::size_t key_offset_ = 0;
    bool key_is_double_ = false;
};

}  // namespace

Place JsonTree::place_of(std::size_t offset) const {
    const auto after = std::upper_bound(line_starts.begin(), line_starts.end(), offset);
    const auto line = static_cast<std::size_t>(after - line_starts.begin());
    Place place{line, 1};
    // Columns count characters, as editors do: the follow-on bytes of UTF-8 count for none.
    for (std::size_t at = line_starts[line - 1]; at < offset && at < source.size(); ++at) {
        if ((static_cast<unsigned char>(source[at]) & 0xC0u) != 0x80u) ++place.column;
    }
    return place;
}

void JsonTree::complain(std::size_t offset, std::string pointer, std::string found,
                        std::string expected, std::string hint) const {
    const Place place = place_of(offset);
    complaints->add({file_name, place.line, place.column, std::move(pointer), std::move(found),
                     std::move(expected), std::move(hint)});
}

std::string pointer_of(const JsonValue& value) {
    std::vector<std::string> parts;
    for (const JsonValue* at = &value; at->parent != nullptr; at = at->parent) {
        parts.push_back(at->parent->kind == JsonKind::object ? TreeBuilder::escaped(at->key)
                                                             : std::to_string(at->index));
    }
    std::string out;
    for (auto part = parts.rbegin(); part != parts.rend(); ++part) out += "/" + *part;
    return out;
}

bool parse_into(JsonTree& tree) {
    const std::string& text = tree.source;
    tree.start = starts_with_at(text, 0, "\xEF\xBB\xBF") ? 3 : 0;
    tree.line_starts.assign(1, tree.start);
    for (std::size_t at = 0; at < text.size(); ++at) {
        if (text[at] == '\n') tree.line_starts.push_back(at + 1);
    }
    // The lexer takes a zero byte for the end of the text and would ignore what follows.
    if (const std::size_t zero = text.find('\0'); zero != std::string::npos) {
        tree.complain(zero, {}, "the byte 0x00", "text", "is it a JSON file?");
        return false;
    }
    std::size_t consumed = 0;
    TreeBuilder builder(tree, consumed);
    const CountingIterator first(text.data() + tree.start, &consumed);
    const CountingIterator last(text.data() + text.size(), &consumed);
    return nlohmann::json::sax_parse(first, last, &builder) && tree.root != nullptr;
}

}  // namespace lanewright::detail

#pragma once
// Purpose:   read JSON files that people write: every value keeps its line and column, every
//            complaint of a file is collected, unknown and duplicate keys are complaints.
// Ownership: a Document owns its tree; Node, Object and List point into it and must not outlive it.
//            The Complaints handed to load or parse must outlive the Document.
// Threads:   one thread at a time per Document.
//
// Use:       Complaints complaints;
//            auto doc = Document::load("board.json", complaints);
//            if (!doc) ...                                  // unreadable, or not JSON
//            Object top = doc->root().object();
//            auto name = top.text("name");                  // required
//            auto gain = top.number_or("gain", 1.0, {.at_least = 0});
//            top.finish();                                  // complains of keys nobody asked for
//            if (complaints.any()) ...
// Limits:    16 MiB a file, 64 levels of nesting, integers of 64 bits.
// A getter that finds nothing usable complains once and returns a default value, so a decoder
// reads on and the user sees all errors of the file at once.

#include <cstdint>
#include <limits>
#include <map>
#include <memory>
#include <optional>
#include <set>
#include <string>
#include <string_view>
#include <vector>

namespace lanewright {

struct Place {
    std::size_t line = 0, column = 0;  // from 1; a column is a character, not a byte
};

struct Complaint {
    std::string file;
    std::size_t line = 0, column = 0;  // from 1; 0: the file as a whole
    std::string pointer;               // JSON pointer, RFC 6901
    std::string found, expected, hint;
    std::string text() const;  // file:line:column: pointer: found ..., expected ...; hint
};

class Complaints {
  public:
    void add(Complaint complaint);
    bool any() const { return !all_.empty(); }
    bool any_of(const std::string& file) const;
    const std::vector<Complaint>& all() const { return all_; }
    std::string text() const;  // a line each, in order of position

  private:
    std::vector<Complaint> all_;
};

namespace detail {
struct JsonTree;
struct JsonValue;
}  // namespace detail

class Object;
class List;

struct NumberRange {
    double at_least = -std::numeric_limits<double>::infinity();
    double at_most = std::numeric_limits<double>::infinity();
    double above = -std::numeric_limits<double>::infinity();  // exclusive
};

struct IntegerRange {
    std::int64_t at_least = std::numeric_limits<std::int64_t>::min();
    std::int64_t at_most = std::numeric_limits<std::int64_t>::max();
};

// One value of the file.
class Node {
  public:
    Object object() const;  // complains and gives an empty object if it is something else
    List list() const;      // likewise
    std::string text() const;
    bool boolean() const;
    double number(NumberRange range = {}) const;
    // A JSON integer, or a string such as "0x1F4" (registers and addresses are written in hex).
    std::int64_t integer(IntegerRange range = {}) const;
    // One of the words given; its index. Complains with a suggestion and returns 0 otherwise.
    std::size_t word(const std::vector<std::string_view>& words) const;

    bool is_object() const;
    bool is_list() const;
    bool is_text() const;
    bool is_number() const;
    bool is_null() const;

    std::string pointer() const;
    std::size_t line() const;
    std::size_t column() const;
    // A complaint about this very value.
    void complain(std::string found, std::string expected, std::string hint = {}) const;
    // How the value reads in a message: 12, "abc", an object, a list of 3.
    std::string described() const;

  private:
    friend class Object;
    friend class List;
    friend class Document;
    Node(detail::JsonTree* tree, const detail::JsonValue* value) : tree_(tree), value_(value) {}
    detail::JsonTree* tree_;
    const detail::JsonValue* value_;
};

class Object {
  public:
    bool has(std::string_view key) const;
    std::optional<Node> find(std::string_view key) const;  // marks the key as known
    Node need(std::string_view key) const;                 // complains if absent; then a null node

    std::string text(std::string_view key) const;
    std::string text_or(std::string_view key, std::string_view otherwise) const;
    bool boolean_or(std::string_view key, bool otherwise) const;
    double number(std::string_view key, NumberRange range = {}) const;
    double number_or(std::string_view key, double otherwise, NumberRange range = {}) const;
    std::int64_t integer(std::string_view key, IntegerRange range = {}) const;
    std::int64_t integer_or(std::string_view key, std::int64_t otherwise,
                            IntegerRange range = {}) const;
    std::size_t word(std::string_view key, const std::vector<std::string_view>& words) const;
    std::size_t word_or(std::string_view key, std::size_t otherwise,
                        const std::vector<std::string_view>& words) const;
    Object object(std::string_view key) const;                    // required
    std::optional<Object> object_if(std::string_view key) const;  // absent: empty
    List list(std::string_view key) const;                        // required
    List list_or_empty(std::string_view key) const;

    const Node& node() const { return node_; }
    std::vector<std::string> keys() const;  // in the file's order; marks all as known

    // Complains of every key that no getter has asked for, with the nearest known key as a hint.
    void finish() const;

  private:
    friend class Node;
    explicit Object(Node node)
        : node_(node), asked_(std::make_shared<std::set<std::string, std::less<>>>()) {}
    Node node_;
    std::shared_ptr<std::set<std::string, std::less<>>> asked_;  // shared by copies of the cursor
};

class List {
  public:
    std::size_t size() const;
    Node at(std::size_t index) const;
    const Node& node() const { return node_; }
    std::vector<double> numbers(NumberRange range = {}) const;
    std::vector<std::string> texts() const;
    auto begin() const { return Iterator{this, 0}; }
    auto end() const { return Iterator{this, size()}; }

    struct Iterator {
        const List* list;
        std::size_t index;
        Node operator*() const { return list->at(index); }
        Iterator& operator++() {
            ++index;
            return *this;
        }
        bool operator!=(const Iterator& other) const { return index != other.index; }
    };

  private:
    friend class Node;
    friend class Object;
    explicit List(Node node) : node_(node) {}
    Node node_;
};

class Document {
  public:
    // Empty on an unreadable file or a syntax error; the complaint says where and what to do.
    static std::optional<Document> load(const std::string& path, Complaints& complaints);
    static std::optional<Document> parse(std::string text, const std::string& file_name,
                                         Complaints& complaints);
    Node root() const;
    const std::string& source() const;  // the file's full text
    const std::string& file_name() const;
    std::map<std::string, Place> places() const;  // of every value, by JSON pointer

    Document(Document&&) noexcept;
    Document& operator=(Document&&) noexcept;
    ~Document();

  private:
    explicit Document(std::unique_ptr<detail::JsonTree> tree);
    std::unique_ptr<detail::JsonTree> tree_;
};

// The candidate nearest to `word` (at most a third of its letters differ), or empty.
std::string nearest_word(std::string_view word, const std::vector<std::string_view>& candidates);

}  // namespace lanewright

#include "daemon/replay/csv.hpp"

#include <cstdint>
#include <utility>

namespace lanewright {

namespace {

constexpr std::size_t longest_row = std::size_t{1} << 20;
constexpr std::size_t longest_field = std::size_t{1} << 15;
constexpr std::size_t most_line_ends = 64;
constexpr std::size_t most_fields = 4096;

// Length of the well-formed character that begins here; 0: none does. RFC 3629, section 4.
std::size_t character_length(std::string_view text) {
    const auto byte = [&](std::size_t i) { return static_cast<std::uint8_t>(text[i]); };
    const auto tail = [&](std::size_t i, unsigned low = 0x80, unsigned high = 0xBF) {
        return i < text.size() && byte(i) >= low && byte(i) <= high;
    };
    const unsigned first = byte(0);
    if (first == 0) return 0;
    if (first < 0x80) return 1;
    if (first >= 0xC2 && first <= 0xDF) return tail(1) ? 2 : 0;
    if (first >= 0xE0 && first <= 0xEF) {
        const unsigned low = first == 0xE0 ? 0xA0 : 0x80, high = first == 0xED ? 0x9F : 0xBF;
        return tail(1, low, high) && tail(2) ? 3 : 0;
    }
    if (first >= 0xF0 && first <= 0xF4) {
        const unsigned low = first == 0xF0 ? 0x90 : 0x80, high = first == 0xF4 ? 0x8F : 0xBF;
        return tail(1, low, high) && tail(2) && tail(3) ? 4 : 0;
    }
    return 0;
}

}  // namespace

bool is_utf8_text(std::string_view text) {
    while (!text.empty()) {
        const std::size_t length = character_length(text);
        if (length == 0) return false;
        text.remove_prefix(length);
    }
    return true;
}

CsvReader::CsvReader(std::string_view text, char separator) : text_(text), separator_(separator) {
    if (text_.starts_with("\xEF\xBB\xBF")) at_ = 3;  // byte order mark
}

bool CsvReader::at_line_end() const {
    return at_ >= text_.size() || text_[at_] == '\n' ||
           (text_[at_] == '\r' && (at_ + 1 == text_.size() || text_[at_ + 1] == '\n'));
}

void CsvReader::pass_line_end() {
    if (at_ < text_.size() && text_[at_] == '\r') ++at_;
    if (at_ < text_.size() && text_[at_] == '\n') ++at_;
    ++line_;
}

// To the beginning of the next line.
void CsvReader::pass_line() {
    const std::size_t end = text_.find('\n', at_);
    at_ = end == std::string_view::npos ? text_.size() : end;
    pass_line_end();
}

// The row is lost; reading goes on with the line after the one on which it began, so that one
// stray quote costs one line and not the rest of the file.
CsvReader::Ended CsvReader::fail(CsvRow& row, std::string why) {
    row.fault = std::move(why);
    at_ = row_at_;
    line_ = row.line;
    pass_line();
    return Ended::fault;
}

CsvReader::Ended CsvReader::after_field(CsvRow& row) {
    if (row.fields.size() > most_fields) {
        return fail(row, "more than " + std::to_string(most_fields) + " fields");
    }
    if (!is_utf8_text(row.fields.back())) {
        return fail(row, "field " + std::to_string(row.fields.size()) +
                             " is not UTF-8 text; save the file as UTF-8");
    }
    if (at_line_end()) {
        pass_line_end();
        return Ended::row;
    }
    ++at_;  // the separator
    return Ended::field;
}

CsvReader::Ended CsvReader::read_plain(CsvRow& row) {
    const std::size_t begin = at_;
    for (; !at_line_end() && text_[at_] != separator_; ++at_) {
        if (text_[at_] == '"') {
            return fail(row,
                        "a quote inside a field that does not begin with one; quote the whole "
                        "field and double the quotes in it");
        }
        if (text_[at_] == '\r') return fail(row, "a carriage return without a line feed");
        if (at_ - begin >= longest_field) return fail(row, "a field of more than 32 KiB");
    }
    row.fields.emplace_back(text_.substr(begin, at_ - begin));
    return after_field(row);
}

CsvReader::Ended CsvReader::read_quoted(CsvRow& row) {
    std::string field;
    std::size_t line_ends = 0;
    for (++at_;; ++at_) {
        if (at_ >= text_.size()) return fail(row, "a quoted field that is never closed");
        if (field.size() >= longest_field || line_ends > most_line_ends) {
            return fail(row, "a quoted field that is not closed within 32 KiB and 64 lines");
        }
        if (text_[at_] != '"') {
            if (text_[at_] == '\n') {
                ++line_ends;
                ++line_;
            }
            field += text_[at_];
        } else if (at_ + 1 < text_.size() && text_[at_ + 1] == '"') {
            field += text_[++at_];
        } else {
            break;
        }
    }
    ++at_;  // the closing quote
    if (!at_line_end() && text_[at_] != separator_) {
        return fail(row, "text after the closing quote of a field");
    }
    row.fields.push_back(std::move(field));
    return after_field(row);
}

CsvReader::Ended CsvReader::read_field(CsvRow& row) {
    if (at_ - row_at_ > longest_row) return fail(row, "a row of more than 1 MiB");
    const bool quoted = at_ < text_.size() && text_[at_] == '"';
    return quoted ? read_quoted(row) : read_plain(row);
}

bool CsvReader::next(CsvRow& row) {
    while (at_ < text_.size() && at_line_end()) pass_line_end();
    if (at_ >= text_.size()) return false;
    row = CsvRow{};
    row.line = line_;
    row_at_ = at_;
    Ended ended = Ended::field;
    while (ended == Ended::field) ended = read_field(row);
    return true;
}

}  // namespace lanewright

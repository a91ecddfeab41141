#pragma once
// Purpose:   reads comma-separated values (RFC 4180) that any program may have written: quoted
//            fields with separators, quotes and line ends inside, CRLF or LF, a byte order mark.
//            What is not well formed is a row with a fault, never a guess; the next row is found
//            again.
// Ownership: refers to the text, which must outlive it.
// Threads:   one caller at a time.
// Limits:    1 MiB a row, 32 KiB and 64 line ends a field, 4096 fields a row. Text is UTF-8.

#include <cstddef>
#include <string>
#include <string_view>
#include <vector>

namespace lanewright {

struct CsvRow {
    std::size_t line = 0;  // on which it begins, from 1
    std::vector<std::string> fields;
    std::string fault;  // what is wrong with it as text; the fields are then not to be used
};

class CsvReader {
  public:
    explicit CsvReader(std::string_view text, char separator = ',');

    // The next row; false at the end. Empty lines are passed over.
    bool next(CsvRow& row);

  private:
    enum class Ended { field, row, fault };
    Ended read_field(CsvRow& row);
    Ended read_quoted(CsvRow& row);
    Ended read_plain(CsvRow& row);
    Ended after_field(CsvRow& row);
    Ended fail(CsvRow& row, std::string why);
    bool at_line_end() const;
    void pass_line_end();
    void pass_line();

    std::string_view text_;
    char separator_;
    std::size_t at_ = 0, line_ = 1;
    std::size_t row_at_ = 0;
};

// Well-formed UTF-8 (RFC 3629): no overlong form, no surrogate, nothing above U+10FFFF, no NUL.
bool is_utf8_text(std::string_view text);

}  // namespace lanewright

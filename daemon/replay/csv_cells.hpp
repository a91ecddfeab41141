#pragma once
// Purpose:   the cells of one row as numbers and words, and why a row cannot be taken.
// Ownership: refers to the row for its life.
// Threads:   one caller at a time.

#include <cstdint>
#include <optional>
#include <stdexcept>
#include <string>
#include <string_view>
#include <unordered_map>
#include <vector>

#include "daemon/replay/columns.hpp"

namespace lanewright {

// The row cannot be taken; the first reason counts.
class BadRow : public std::runtime_error {
  public:
    BadRow(std::string column, const std::string& reason)
        : std::runtime_error(reason), column_(std::move(column)) {}
    const std::string& column() const { return column_; }

  private:
    std::string column_;
};

// The columns of a file by their names in its first row.
using CsvHeader = std::unordered_map<std::string, std::size_t>;

class Cells {
  public:
    Cells(const CsvHeader& header, const std::vector<std::string>& fields)
        : header_(header), fields_(fields) {}

    // Spaces around it are taken off.
    std::string_view text(const std::string& column) const;
    bool empty(const std::string& column) const { return text(column).empty(); }

    // Decimal numbers with a point: no thousands separators, no NaN, no infinity, no units. BadRow
    // says what was found instead.
    double number(const std::string& column) const;
    std::int64_t integer(const std::string& column, std::int64_t lowest,
                         std::int64_t highest) const;
    // The index of one of these words.
    std::size_t word(const std::string& column, const std::vector<std::string_view>& words) const;

  private:
    const CsvHeader& header_;
    const std::vector<std::string>& fields_;
};

// A cell as it reads in a message: quoted, cut where it is long.
std::string shown(std::string_view text);

}  // namespace lanewright

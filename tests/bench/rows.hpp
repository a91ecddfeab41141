#pragma once
// Purpose:   the rows of a benchmark: one JSON line each as it is measured, and a table at the end.
// Ownership: a Rows object owns its rows and prints the table when finish() is called.
// Threads:   one thread at a time.
//
// A missed `must` is printed as MISSED and counted; the exit status of a benchmark stays 0, for
// a loaded machine is no fault of the program.

#include <cstdint>
#include <iosfwd>
#include <optional>
#include <string>
#include <vector>

namespace lanewright::bench {

enum class Better : std::uint8_t { less, more };

struct Row {
    std::string name;
    double value = 0;
    std::string unit;
    Better better = Better::less;
    std::optional<double> must = std::nullopt;  // missed: reported as MISSED
    std::optional<double> aim = std::nullopt;   // what would be good
    std::uint64_t n = 1;                        // how often measured, or over how many cases
    std::uint64_t seed = 0;
};

// True if there is a `must` and the value is on its wrong side, or not a number.
bool missed(const Row& row);

// One JSON object on one line: name, value, unit, better, must, aim, n, seed, load, commit. A
// value that is not finite, and a limit that is absent, are null.
std::string json_line(const Row& row, double load, const std::string& commit);

// At most 80 columns wide, header and summary included.
std::string table(const std::vector<Row>& rows);

class Rows {
  public:
    // Measures the calibration row: CPU seconds of a fixed loop, by which the rows of two
    // machines can be compared.
    explicit Rows(std::ostream& out);

    void row(const Row& row);

    // The value of the calibration row.
    double calibration_s() const { return rows_.front().value; }

    // Prints the table and the summary. Returns 0, the exit status of a benchmark.
    int finish();

  private:
    std::ostream& out_;
    std::string commit_;
    std::vector<Row> rows_;
};

// The machine's load average over the last minute; below zero where it is not known.
double load_average();

// LANEWRIGHT_COMMIT, or the working tree's git hash with "+" where it was changed, or "unknown".
std::string commit_hash();

// CPU seconds of this process so far, all its threads.
double cpu_seconds();

}  // namespace lanewright::bench

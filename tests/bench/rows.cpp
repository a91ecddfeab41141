#include "tests/bench/rows.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <ctime>
#include <fstream>
#include <memory>
#include <nlohmann/json.hpp>
#include <ostream>

namespace lanewright::bench {

namespace {

std::string output_of(const std::string& command) {
    struct Close {
        void operator()(FILE* pipe) const { pclose(pipe); }
    };
    const std::unique_ptr<FILE, Close> pipe(popen(command.c_str(), "r"));
    std::string out;
    if (!pipe) return out;
    std::array<char, 256> block{};
    while (fgets(block.data(), static_cast<int>(block.size()), pipe.get()) != nullptr)
        out += block.data();
    while (!out.empty() && out.back() == '\n') out.pop_back();
    return out;
}

nlohmann::json number_or_null(std::optional<double> value) {
    if (!value || !std::isfinite(*value)) return nullptr;
    return *value;
}

std::string short_number(std::optional<double> value) {
    if (!value) return "-";
    char text[32];
    std::snprintf(text, sizeof text, "%.4g", *value);
    return text;
}

// Cut or filled with spaces to that width.
std::string left(std::string text, std::size_t width) {
    text.resize(width, ' ');
    return text;
}

std::string right(const std::string& text, std::size_t width) {
    return text.size() < width ? std::string(width - text.size(), ' ') + text : text;
}

std::string table_line(const std::string& name, const std::string& value, const std::string& unit,
                       const std::string& must, const std::string& aim, const std::string& note) {
    std::string line = left(name, 30) + right(value, 11) + " " + left(unit, 8) + right(must, 10) +
                       right(aim, 10) + (note.empty() ? "" : " " + note);
    line.erase(line.find_last_not_of(' ') + 1);
    return line + "\n";
}

// 64-bit mixing that no compiler can shorten, the same work on every machine.
double calibration_seconds() {
    const double before = cpu_seconds();
    std::uint64_t mixed = 1;
    for (int i = 0; i < 100'000'000; ++i) {
        mixed ^= mixed << 13;
        mixed ^= mixed >> 7;
        mixed ^= mixed << 17;
    }
    const volatile std::uint64_t kept = mixed;
    static_cast<void>(kept);
    return cpu_seconds() - before;
}

}  // namespace

bool missed(const Row& row) {
    if (!row.must) return false;
    const bool met = row.better == Better::less ? row.value <= *row.must : row.value >= *row.must;
    return !met;
}

std::string json_line(const Row& row, double load, const std::string& commit) {
    nlohmann::ordered_json line;
    line["name"] = row.name;
    line["value"] = number_or_null(row.value);
    line["unit"] = row.unit;
    line["better"] = row.better == Better::less ? "less" : "more";
    line["must"] = number_or_null(row.must);
    line["aim"] = number_or_null(row.aim);
    line["n"] = row.n;
    line["seed"] = row.seed;
    line["load"] = load < 0 ? nlohmann::json(nullptr) : nlohmann::json(load);
    line["commit"] = commit;
    return line.dump(-1, ' ', false, nlohmann::json::error_handler_t::replace);
}

std::string table(const std::vector<Row>& rows) {
    std::string out = table_line("name", "value", "unit", "must", "aim", "");
    for (const Row& row : rows) {
        const auto limit = [&row](std::optional<double> value) {
            if (!value) return std::string("-");
            return (row.better == Better::less ? "<" : ">") + short_number(value);
        };
        out += table_line(row.name, short_number(row.value), row.unit, limit(row.must),
                          limit(row.aim), missed(row) ? "MISSED" : "");
    }
    const auto count = std::count_if(rows.begin(), rows.end(), missed);
    out += std::to_string(rows.size()) + " rows, " + std::to_string(count) + " missed\n";
    return out;
}

Rows::Rows(std::ostream& out) : out_(out), commit_(commit_hash()) {
    Row calibration;
    calibration.name = "calibration: 1e8 xorshifts";
    calibration.value = calibration_seconds();
    calibration.unit = "cpu s";
    row(calibration);
}

void Rows::row(const Row& row) {
    rows_.push_back(row);
    out_ << json_line(row, load_average(), commit_) << std::endl;
}

int Rows::finish() {
    out_ << '\n' << table(rows_) << std::flush;
    return 0;
}

double load_average() {
    std::ifstream file("/proc/loadavg");
    double load = -1;
    return file >> load ? load : -1;
}

std::string commit_hash() {
    if (const char* given = std::getenv("LANEWRIGHT_COMMIT"); given != nullptr && *given != '\0')
        return given;
    const std::string hash = output_of("git rev-parse --short=12 HEAD 2>/dev/null");
    if (hash.empty()) return "unknown";
    const bool changed =
        !output_of("git status --porcelain --untracked-files=no 2>/dev/null").empty();
    return hash + (changed ? "+" : "");
}

double cpu_seconds() {
    timespec time{};
    clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &time);
    return static_cast<double>(time.tv_sec) + 1e-9 * static_cast<double>(time.tv_nsec);
}

}  // namespace lanewright::bench

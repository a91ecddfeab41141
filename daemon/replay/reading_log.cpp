#include "daemon/replay/reading_log.hpp"

#include <algorithm>
#include <cmath>
#include <set>

namespace lanewright {

std::size_t CodesHash::operator()(const Codes& codes) const {
    // FNV-1a, of whole words.
    std::uint64_t hash = 0xCBF29CE484222325u;
    for (const std::int32_t code : codes.value) {
        hash = (hash ^ static_cast<std::uint32_t>(code)) * 0x100000001B3u;
    }
    return static_cast<std::size_t>(hash ^ (hash >> 29));
}

bool same_ratio(double logged, double wanted) {
    // Ratios are powers of ten or decimal fractions; rounding is far below a millionth.
    return logged == 0 || std::abs(logged - wanted) <= 1e-6 * wanted;
}

ReadingLog::ReadingLog(const std::vector<LaneReadingRecord>& readings) {
    for (const bool search : {true, false}) {
        for (const LaneReadingRecord& record : readings) {
            // The preflight waits, leaves and returns: its readings are no margins to choose by.
            if ((record.stage == Stage::search) != search || record.stage == Stage::preflight)
                continue;
            const Reading& reading = record.reading;
            if (reading.status == Status::void_reading) continue;
            if (reading.condition != Condition{0}) continue;
            index_[reading.codes].push_back(static_cast<std::uint32_t>(readings_.size()));
            readings_.push_back(&reading);
        }
    }
}

std::span<const std::uint32_t> ReadingLog::of(const Codes& codes) const {
    const auto found = index_.find(codes);
    if (found == index_.end()) return {};
    return found->second;
}

std::vector<double> ReadingLog::error_ratios() const {
    std::set<double> ratios;
    for (const Reading* reading : readings_) ratios.insert(reading->error_ratio);
    return {ratios.begin(), ratios.end()};
}

std::vector<std::uint32_t> ReadingLog::at(const Codes& codes, double error_ratio) const {
    std::vector<std::uint32_t> out;
    for (const std::uint32_t number : of(codes)) {
        if (same_ratio(readings_[number]->error_ratio, error_ratio)) out.push_back(number);
    }
    return out;
}

const Reading* Answers::next(const Codes& codes, double error_ratio) {
    const std::vector<std::uint32_t> fitting = log_.at(codes, error_ratio);
    if (fitting.empty()) return nullptr;
    const std::uint32_t number = fitting[next_[codes]++ % fitting.size()];
    ++handed_out_;
    if (!seen_.insert(number).second) ++again_;
    return &log_.reading(number);
}

std::vector<Reading> Answers::readings(const Codes& codes, double error_ratio,
                                       bool handed_out) const {
    std::vector<Reading> out;
    for (const std::uint32_t number : log_.at(codes, error_ratio)) {
        if (seen_.contains(number) == handed_out) out.push_back(log_.reading(number));
    }
    return out;
}

}  // namespace lanewright

#include "adapt/search/ledger.hpp"

#include <algorithm>
#include <cmath>
#include <limits>

namespace lanewright {
namespace {

constexpr std::size_t no_limit = std::size_t{1} << 40;

// Whole readings that fit into what is left; the slack forgives rounding in a sum of costs.
std::size_t fitting(double budget, double spent, double each) {
    if (!(budget > 0) || !(each > 0)) return no_limit;
    const double left = (budget - spent) / each + 1e-6;
    if (!(left >= 1)) return 0;
    return left > static_cast<double>(no_limit) ? no_limit : static_cast<std::size_t>(left);
}

}  // namespace

std::size_t codes_changed(const Codes& a, const Codes& b) {
    const std::size_t common = std::min(a.value.size(), b.value.size());
    std::size_t changed = std::max(a.value.size(), b.value.size()) - common;
    for (std::size_t i = 0; i < common; ++i) changed += a.value[i] != b.value[i] ? 1 : 0;
    return changed;
}

void Ledger::add(const Codes& asked, const Reading& reading) {
    if (reading.status == Status::void_reading) return;
    const Request behind = request(asked, reading.condition, {});
    reading_count_ += 1;
    standard_readings_ += lanewright::standard_readings(problem_->cost, behind, reading);
    bench_s_ += reading.cost_s > 0 ? reading.cost_s : cost_s(problem_->cost, behind);
    if (reading.codes != asked) aliases_.insert_or_assign(asked, reading.codes);
    auto& entry = entries_[reading.codes];
    if (entry.readings.empty()) {
        entry.first = merit_of(reading, problem_->required);
    }
    entry.readings.push_back(reading);
    remember(reading);
}

// Latched readings come without slopes and need no telling where to look.
void Ledger::remember(const Reading& reading) {
    constexpr std::size_t most_remembered = 64;
    if (reading.status != Status::open || !reading.slopes) return;
    const auto value = [](const std::optional<Measured>& edge) {
        return edge && edge->bound == Bound::exact && edge->value > 0 ? edge->value : 0;
    };
    found_.push_front({reading.codes,
                       {value(reading.up_mv), value(reading.down_mv), value(reading.left_ui),
                        value(reading.right_ui)}});
    if (found_.size() > most_remembered) found_.pop_back();
}

// Nearest by the sum of what each code differs by, in shares of its range; of equals the latest.
Expected Ledger::expected_at(const Codes& codes) const {
    Expected edges;
    if (problem_->space == nullptr) return edges;
    double nearest = std::numeric_limits<double>::infinity();
    const auto& dimensions = problem_->space->dimensions();
    for (const Found& found : found_) {
        double distance = 0;
        const std::size_t count =
            std::min({dimensions.size(), codes.value.size(), found.codes.value.size()});
        for (std::size_t i = 0; i < count; ++i) {
            const double range =
                std::max(1.0, static_cast<double>(dimensions[i].highest) - dimensions[i].lowest);
            distance +=
                std::abs(static_cast<double>(codes.value[i]) - found.codes.value[i]) / range;
        }
        if (distance < nearest) {
            nearest = distance;
            edges = found.edges;
        }
    }
    return edges;
}

const Ledger::Entry* Ledger::find(const Codes& asked) const {
    if (const auto direct = entries_.find(asked); direct != entries_.end()) return &direct->second;
    const auto alias = aliases_.find(asked);
    if (alias == aliases_.end()) return nullptr;
    const auto found = entries_.find(alias->second);
    return found == entries_.end() ? nullptr : &found->second;
}

std::vector<Codes> Ledger::ranking() const {
    struct Candidate {
        const Codes* codes;
        const Merit* merit;
        std::size_t changed;
    };
    std::vector<Candidate> order;
    for (const auto& [codes, entry] : entries_) {
        if (!problem_->space->allows(codes)) continue;
        order.push_back({&codes, &entry.first, codes_changed(codes, problem_->present)});
    }
    std::sort(order.begin(), order.end(), [](const Candidate& a, const Candidate& b) {
        if (*a.merit != *b.merit) return *a.merit > *b.merit;
        if (a.changed != b.changed) return a.changed < b.changed;
        return *a.codes < *b.codes;
    });
    std::vector<Codes> ranking;
    ranking.reserve(order.size());
    for (const auto& each : order) ranking.push_back(*each.codes);
    return ranking;
}

std::size_t Ledger::affordable() const {
    const Request one = request(problem_->present, {}, {});
    return std::min(fitting(problem_->budget.standard_readings, standard_readings_,
                            lanewright::standard_readings(problem_->cost, one)),
                    fitting(problem_->budget.bench_s, bench_s_, cost_s(problem_->cost, one)));
}

Request Ledger::request(Codes codes, Condition now, std::string why) const {
    Request request;
    MarginWanted wanted = problem_->reading;
    if (!found_.empty()) wanted.expected = expected_at(codes);
    request.codes = std::move(codes);
    request.condition = now;
    request.what = wanted;
    request.why = std::move(why);
    return request;
}

}  // namespace lanewright

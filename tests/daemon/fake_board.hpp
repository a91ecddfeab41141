#pragma once
// Purpose:   a lane reader without wires for tests of the engine: one smooth peak a lane, noise
//            keyed by ordinal, and faults on demand.
// Ownership: values; refers to the TimeSource.
// Threads:   io thread.

#include <algorithm>
#include <cmath>
#include <functional>
#include <map>
#include <string>
#include <vector>

#include "adapt/margin/latched.hpp"
#include "adapt/stats/random.hpp"
#include "drivers/board/lane_reader.hpp"
#include "drivers/io/time_source.hpp"

namespace lanewright::test {

class FakeBoard : public LaneReader {
  public:
    FakeBoard(TimeSource& time, std::uint16_t lane_count) : time_(time) {
        for (std::uint16_t lane = 0; lane < lane_count; ++lane) codes_[lane] = reset_codes();
    }

    static Codes reset_codes() { return {{16, 8, 8, 4}}; }
    static Codes best_codes(std::uint16_t lane) { return {{9 + lane, 10, 5, 2}}; }

    // Called before each operation with its name ("read", "restore", ...); a fault goes back.
    std::function<Fault(const std::string&, Lane)> before_operation;
    std::vector<std::string> log;  // what was done, in order: "save 0", "read 0 #3", ...
    std::map<std::uint16_t, Codes> codes_;
    std::uint32_t serial = 7;

    std::uint64_t resets = 0;

    // What makes a preflight item fail.
    std::vector<StatusItem> status_items;  // of every lane, unless `status_of` says more
    std::function<void(Lane, std::vector<StatusItem>&)> status_of;
    double sigma_scale = 1;      // of the monitor's noise
    double return_sigma_mv = 0;  // of each coming back to codes, on top
    double settling_mv = 0;      // off by so much without a wait, and ...
    double settling_s = 1e-3;    // ... less by a factor e each
    double crosstalk_mv = 0;     // narrower by so much beside another lane's reading
    double after_reset_mv = 0;   // narrower by so much once it has reset
    double drift_mv = 0;         // narrower by so much with every reading of the lane
    bool smaller_at_higher_ratio = false;
    enum class Counts { right, few_far_outside, other_bits, not_rising } counting = Counts::right;
    std::size_t most_at_once = 0;  // lanes that were being read at the same time

    void reset() {
        ++resets;
        for (auto& [lane, codes] : codes_) codes = reset_codes();
    }

    Task<Identity> identify() override {
        if (Fault fault = asked("identify", Lane{0}); fault.cause != Cause::none) co_return fault;
        Identity identity;
        identity.values = {{"chip", 0x4F5A5238}, {"serial", serial}};
        identity.simulated = true;
        co_return identity;
    }

    Task<SavedLane> save(Lane lane) override {
        if (Fault fault = asked("save", lane); fault.cause != Cause::none) co_return fault;
        SavedLane saved;
        saved.lane = lane;
        const char* names[] = {"r1", "r2", "c1", "c2"};
        for (std::size_t i = 0; i < 4; ++i) {
            SavedField field;
            field.field = {std::string("EQ_") + names[i], "code"};
            field.role = Role::tuned;
            field.dimension = names[i];
            field.value = static_cast<std::uint32_t>(codes_.at(number(lane)).value[i]);
            saved.fields.push_back(field);
        }
        co_return saved;
    }

    Task<Codes> codes(Lane lane) override { co_return codes_.at(number(lane)); }

    Task<Applied> apply(Lane lane, Codes codes) override {
        if (Fault fault = asked("apply", lane); fault.cause != Cause::none) co_return fault;
        codes_.at(number(lane)) = codes;
        co_return Applied{codes, true, {}};
    }

    Task<std::vector<StatusItem>> status(Lane lane) override {
        if (Fault fault = asked("status", lane); fault.cause != Cause::none) co_return fault;
        std::vector<StatusItem> out = status_items;
        if (status_of) status_of(lane, out);
        co_return out;
    }

    Task<LaneReading> read(Lane lane, Request request, std::uint32_t ordinal) override {
        most_at_once = std::max(most_at_once, ++reading_now_);
        const bool alone = reading_now_ == 1;
        co_await time_.sleep_until(time_.now() + std::chrono::milliseconds(100));
        const bool beside = !alone || reading_now_ > 1;
        --reading_now_;
        if (Fault fault = asked("read", lane, ordinal); fault.cause != Cause::none) co_return fault;
        History& history = history_[number(lane)];
        if (codes_.at(number(lane)) != request.codes) ++history.visits;
        const bool back = codes_.at(number(lane)) != request.codes;
        codes_.at(number(lane)) = request.codes;
        ++history.readings;
        LaneReading out;
        if (const auto* looks = std::get_if<LooksWanted>(&request.what)) {
            out.reading.status = Status::open;
            for (const Look& look : looks->looks) out.reading.counts.push_back(count_at(look));
        } else {
            const auto& wanted = std::get<MarginWanted>(request.what);
            double off_mv = beside ? -crosstalk_mv : 0;
            off_mv -= drift_mv * history.readings;
            if (resets > 0) off_mv -= after_reset_mv;
            off_mv +=
                return_sigma_mv * Random(RandomKey{78, number(lane), 9, history.visits}).normal();
            if (back) off_mv -= settling_mv * std::exp(-request.wait_s / settling_s);
            if (smaller_at_higher_ratio && wanted.error_ratio > 1e-4) off_mv -= 40;
            out.reading =
                latched_reading({2, 0.015625, 511, 127, 1.0, 0.006},
                                edges(number(lane), request.codes, ordinal, off_mv), wanted);
        }
        out.reading.codes = request.codes;
        WireOperation op;
        op.kind = WireOperation::Kind::write;
        op.value = static_cast<std::uint32_t>(request.codes.value[0]);
        out.wire.push_back(op);
        co_return out;
    }

    Task<Codes> restore(Lane lane, SavedLane saved) override {
        if (Fault fault = asked("restore", lane); fault.cause != Cause::none) co_return fault;
        Codes codes;
        for (const SavedField& field : saved.fields) {
            codes.value.push_back(static_cast<std::int32_t>(field.value));
        }
        codes_.at(number(lane)) = codes;
        co_return codes;
    }

    Task<void> bring_up(Lane lane) override {
        if (Fault fault = asked("bring_up", lane); fault.cause != Cause::none) co_return fault;
        co_return Result<void>{};
    }

  private:
    struct History {
        std::uint32_t readings = 0, visits = 0;
    };

    Count count_at(Look look) const {
        Count out;
        if (counting == Counts::other_bits) look.bits /= 2;
        out.look = look;
        const double far = std::abs(look.offset_mv);
        double ratio = 0.5 * std::clamp((far - 60) / 60, 0.0, 1.0);
        if (counting == Counts::few_far_outside && far > 200) ratio = 0.1;
        if (counting == Counts::not_rising && far > 100 && far < 200) ratio = 0.001;
        out.errors = static_cast<std::uint64_t>(ratio * static_cast<double>(look.bits));
        return out;
    }

    Fault asked(const std::string& what, Lane lane, std::uint32_t ordinal = 0) {
        log.push_back(what + " " + std::to_string(number(lane)) +
                      (what == "read" ? " #" + std::to_string(ordinal) : ""));
        return before_operation ? before_operation(what, lane) : Fault{};
    }

    LatchedEdges edges(std::uint16_t lane, const Codes& codes, std::uint32_t ordinal,
                       double off_mv) const {
        const Codes best = best_codes(lane);
        double distance = 0;
        for (std::size_t i = 0; i < 4; ++i) {
            const double d = (codes.value[i] - best.value[i]) / (i == 0 ? 8.0 : 5.0);
            distance += d * d;
        }
        const double half_mv = 60.0 * std::exp(-distance);
        const double half_ui = 0.35 * std::exp(-distance);
        Random noise(RandomKey{77, lane, 9, ordinal});
        const auto steps = [&](double value, double step, double sigma) {
            return static_cast<std::int32_t>(
                std::lround(std::max(0.0, value + sigma_scale * sigma * noise.normal()) / step));
        };
        LatchedEdges out;
        out.up = steps(half_mv + off_mv, 2, 1.0);
        out.down = steps(half_mv + off_mv, 2, 1.0);
        out.left = steps(half_ui, 0.015625, 0.006);
        out.right = steps(half_ui, 0.015625, 0.006);
        return out;
    }

    TimeSource& time_;
    std::map<std::uint16_t, History> history_;
    std::size_t reading_now_ = 0;
};

}  // namespace lanewright::test

#pragma once
// Purpose:   what a run is doing, while it does it: on a terminal one line a lane, redrawn in
//            place; elsewhere a plain line at each lane's landmarks. Always on stderr.
// Ownership: own fold of the events; refers to nothing.
// Threads:   io thread.

#include <chrono>
#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "adapt/values/values.hpp"
#include "daemon/store/journal.hpp"

namespace lanewright {

struct ProgressPlan {
    std::vector<std::uint16_t> lanes;
    Required required;
    double budget_readings = 0;  // 0: not limited
    double budget_bench_s = 0;
};

class Progress : public Observer {
  public:
    Progress(ProgressPlan plan, bool terminal);

    void on_event(const StoredEvent& event) noexcept override;

    // A line for people, above the lanes' lines where these are redrawn in place.
    void interject(const std::string& text);

    // The last state of all lanes stays on the screen.
    void finish();

  private:
    struct LaneLine {
        std::string phase = "waiting";
        std::optional<double> best_score;
        std::size_t reading_count = 0;
        double search_s = 0, bench_s = 0;
        bool side = false;  // the reading under way is not the strategy's
        bool done = false;
    };

    void take(const StoredEvent& event);
    std::string line_of(std::uint16_t lane, const LaneLine& line) const;
    std::string time_left(const LaneLine& line) const;
    void draw(bool now);
    void draw_if_terminal();
    void tell(const PreflightItem& item) const;
    void say(std::uint16_t lane, const std::string& text) const;

    ProgressPlan plan_;
    bool terminal_;
    std::map<std::uint16_t, LaneLine> lines_;
    std::size_t drawn_ = 0;
    std::chrono::steady_clock::time_point last_drawn_{};
};

}  // namespace lanewright

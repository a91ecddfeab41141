#include "sim_target/board/lane_model.hpp"

#include <iostream>

namespace lanewright::sim {

namespace {

class OracleModel final : public LaneModel {
  public:
    OracleModel(const TargetFile& target, int lane)
        : oracle_(target, lane), seed_(target.seed), error_ratio_(target.monitor.error_ratio) {
        if (!oracle_.channel_note().empty()) {
            std::cerr << "lane " << lane << ": " << oracle_.channel_note() << '\n';
        }
    }

    LatchedEdges latch(const std::vector<int>& codes, double error_ratio, std::uint64_t dwell_bits,
                       std::uint64_t ordinal) const override {
        const double ratio = error_ratio > 0 ? error_ratio : error_ratio_;
        return latched_reading(oracle_, codes, ratio, dwell_bits, seed_, oracle_.lane(), ordinal);
    }

    bool locks(const std::vector<int>& codes) const override {
        return oracle_.margins(codes, error_ratio_).locked;
    }

  private:
    Oracle oracle_;
    std::uint64_t seed_;
    double error_ratio_;
};

}  // namespace

std::vector<std::unique_ptr<LaneModel>> make_lane_models(const TargetFile& target) {
    std::vector<std::unique_ptr<LaneModel>> models;
    for (std::size_t lane = 0; lane < target.lanes.size(); ++lane) {
        models.push_back(std::make_unique<OracleModel>(target, static_cast<int>(lane)));
    }
    return models;
}

}  // namespace lanewright::sim

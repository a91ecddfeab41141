#include "adapt/search/moves.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>
#include <map>
#include <tuple>
#include <vector>

#include "adapt/search/response.hpp"

namespace lanewright {
namespace {

// ---- along raw codes

std::int64_t range_of(const Dimension& dimension) {
    return std::max<std::int64_t>(std::int64_t{dimension.highest} - dimension.lowest, 0);
}

std::int64_t first_step(const Dimension& dimension) {
    return std::max<std::int64_t>((range_of(dimension) + 2) / 4, 1);
}

std::size_t levels_of(const Dimension& dimension) {
    std::size_t levels = 1;
    for (std::int64_t step = first_step(dimension); step > 1; step /= 2) ++levels;
    return levels;
}

std::optional<Codes> code_step(const CodeSpace& space, const Codes& from, std::size_t dimension,
                               int direction, std::size_t level) {
    const auto& bank = space.dimensions()[dimension];
    const std::int64_t here = from.value[dimension];
    const std::int64_t size =
        std::max<std::int64_t>(first_step(bank) >> std::min<std::size_t>(level, 40), 1);
    std::int64_t there =
        std::clamp<std::int64_t>(here + direction * size, bank.lowest, bank.highest);
    Codes codes = from;
    for (; there != here; there -= direction) {
        codes.value[dimension] = static_cast<std::int32_t>(there);
        if (space.allows(codes)) return codes;
    }
    return std::nullopt;
}

class CodeMoves : public Moves {
  public:
    explicit CodeMoves(const CodeSpace& space) : space_(&space) {
        for (std::size_t i = 0; i < space.dimensions().size(); ++i) {
            if (range_of(space.dimensions()[i]) > 0) axes_.push_back(i);
        }
    }
    std::size_t axes() const override { return axes_.size(); }
    std::size_t levels() const override {
        std::size_t levels = 1;
        for (auto i : axes_) levels = std::max(levels, levels_of(space_->dimensions()[i]));
        return levels;
    }
    std::string axis_name(std::size_t axis) const override {
        return space_->dimensions()[axes_.at(axis)].name;
    }
    std::optional<Codes> step(const Codes& from, std::size_t axis, int direction,
                              std::size_t level) const override {
        return code_step(*space_, from, axes_.at(axis), direction, level);
    }

  private:
    const CodeSpace* space_;
    std::vector<std::size_t> axes_;
};

// ---- along pairs of raw codes

class PairMoves : public Moves {
  public:
    explicit PairMoves(const CodeSpace& space) : space_(space), single_(space) {
        for (const int together : {-1, +1}) {
            for (std::size_t one = 0; one < single_.axes(); ++one) {
                for (std::size_t other = one + 1; other < single_.axes(); ++other) {
                    axes_.push_back({one, other, together});
                }
            }
        }
    }
    std::size_t axes() const override { return axes_.size(); }
    std::size_t levels() const override { return single_.levels(); }
    std::string axis_name(std::size_t axis) const override {
        const Axis& pair = axes_.at(axis);
        return single_.axis_name(pair.one) + (pair.together > 0 ? " and " : " against ") +
               single_.axis_name(pair.other);
    }
    // The length of each part is that of the step along its own axis.
    std::optional<Codes> step(const Codes& from, std::size_t axis, int direction,
                              std::size_t level) const override {
        const Axis& pair = axes_.at(axis);
        const auto first = single_.step(from, pair.one, direction, level);
        const auto second = single_.step(from, pair.other, direction * pair.together, level);
        if (!first || !second) return std::nullopt;
        Codes codes = from;
        for (std::size_t i = 0; i < codes.value.size(); ++i) {
            codes.value[i] += first->value[i] - from.value[i] + second->value[i] - from.value[i];
        }
        if (!space_.allows(codes)) return std::nullopt;
        return codes;
    }

  private:
    struct Axis {
        std::size_t one = 0, other = 0;
        int together = +1;
    };
    const CodeSpace& space_;
    CodeMoves single_;
    std::vector<Axis> axes_;
};

// ---- along the response

constexpr std::size_t response_axes = 4;
using Point = std::array<double, response_axes>;  // dc, hf, zero, level, all in dB

// How much a dB off the wanted response counts beside the axis that is stepped along: attenuations
// shape the eye most, the zero less, the impedance level only through what loads the network.
constexpr Point weight = {1.0, 1.0, 0.5, 0.25};
constexpr std::array<Part, response_axes> parts = {Part::series_resistor, Part::series_capacitor,
                                                   Part::shunt_resistor, Part::shunt_capacitor};
// Five levels take a quarter of an axis down to a sixty-fourth, about one code of a five-bit bank.
constexpr std::size_t response_levels = 5;
// How far around the element-wise nearest codes the joint nearest ones are looked for.
constexpr std::int64_t neighbourhood = 2;
// A step must bring at least this share of what was wanted along its own axis.
constexpr double least_progress = 0.25;
// An attenuation of 0 dB would need an element of no size.
constexpr double closest_to_0_db = -0.01;

double db_of(double value) {
    return 20 * std::log10(value);
}

Point point_of(const Response& response) {
    return {response.dc_db, response.hf_db, db_of(response.zero_ghz), db_of(response.level_ohm)};
}

Response response_at(const Point& point) {
    Response response;
    response.dc_db = std::min(point[0], closest_to_0_db);
    response.hf_db = std::min(point[1], closest_to_0_db);
    response.zero_ghz = std::pow(10.0, point[2] / 20);
    response.level_ohm = std::pow(10.0, point[3] / 20);
    return response;
}

class ResponseMoves : public Moves {
  public:
    explicit ResponseMoves(const CodeSpace& space) : space_(&space) {
        for (std::size_t i = 0; i < parts.size(); ++i) part_[i] = *space.find(parts[i]);
        for (std::size_t i = 0; i < space.dimensions().size(); ++i) {
            const bool part = std::find(part_.begin(), part_.end(), i) != part_.end();
            if (!part && range_of(space.dimensions()[i]) > 0) others_.push_back(i);
        }
        measure_spans();
    }

    std::size_t axes() const override { return response_axes + others_.size(); }

    std::size_t levels() const override {
        std::size_t levels = response_levels;
        for (auto i : others_) levels = std::max(levels, levels_of(space_->dimensions()[i]));
        return levels;
    }

    std::string axis_name(std::size_t axis) const override {
        constexpr std::array<const char*, response_axes> names = {"dc", "hf", "zero", "level"};
        return axis < response_axes ? names[axis]
                                    : space_->dimensions()[others_.at(axis - response_axes)].name;
    }

    std::optional<Codes> step(const Codes& from, std::size_t axis, int direction,
                              std::size_t level) const override {
        if (axis >= response_axes) {
            return code_step(*space_, from, others_.at(axis - response_axes), direction, level);
        }
        const auto key = std::tuple(from, axis, direction, level);
        if (const auto known = known_.find(key); known != known_.end()) return known->second;
        const auto found = response_step(from, axis, direction, level);
        known_.emplace(key, found);
        return found;
    }

  private:
    // The responses of all combinations of smallest and largest elements bound the space.
    void measure_spans() {
        Point low, high;
        low.fill(std::numeric_limits<double>::infinity());
        high.fill(-std::numeric_limits<double>::infinity());
        for (unsigned corner = 0; corner < 16; ++corner) {
            std::array<double, response_axes> element{};
            for (std::size_t i = 0; i < part_.size(); ++i) {
                const auto& table = space_->dimensions()[part_[i]].nominal;
                const auto ends = std::minmax_element(table.begin(), table.end());
                element[i] = (corner >> i & 1u) != 0 ? *ends.second : *ends.first;
            }
            const auto response = response_of({element[0], element[1], element[2], element[3]});
            if (!response) continue;
            const Point point = point_of(*response);
            for (std::size_t i = 0; i < point.size(); ++i) {
                low[i] = std::min(low[i], point[i]);
                high[i] = std::max(high[i], point[i]);
            }
        }
        for (std::size_t i = 0; i < span_.size(); ++i) span_[i] = std::max(high[i] - low[i], 0.0);
    }

    std::int32_t nearest_code(std::size_t dimension, double element) const {
        const auto& bank = space_->dimensions()[dimension];
        std::size_t best = 0;
        double best_distance = std::numeric_limits<double>::infinity();
        for (std::size_t i = 0; i < bank.nominal.size(); ++i) {
            const double distance = std::abs(std::log(bank.nominal[i] / element));
            if (distance < best_distance) {
                best_distance = distance;
                best = i;
            }
        }
        return bank.lowest + static_cast<std::int32_t>(best);
    }

    std::optional<Codes> response_step(const Codes& from, std::size_t axis, int direction,
                                       std::size_t level) const {
        const auto here = response_of(*space_, from);
        const double size = span_[axis] / 4 / std::pow(2.0, static_cast<double>(level));
        if (!here || !(size > 0)) return std::nullopt;
        const Point start = point_of(*here);
        Point wanted = start;
        wanted[axis] += direction * size;
        const auto network = network_of(response_at(wanted));
        if (!network) return std::nullopt;
        const std::array<double, response_axes> elements = {network->r1_ohm, network->c1_farad,
                                                            network->r2_ohm, network->c2_farad};
        Codes centre = from;
        for (std::size_t i = 0; i < part_.size(); ++i) {
            centre.value[part_[i]] = nearest_code(part_[i], elements[i]);
        }
        return nearest_around(centre, from, start, wanted, axis, direction * size);
    }

    // The allowed codes closest to the wanted point; equally close ones by fewer code steps.
    std::optional<Codes> nearest_around(const Codes& centre, const Codes& from, const Point& start,
                                        const Point& wanted, std::size_t axis,
                                        double progress) const {
        std::optional<Codes> best;
        double best_distance = std::numeric_limits<double>::infinity();
        constexpr std::int64_t width = 2 * neighbourhood + 1;
        for (std::int64_t index = 0; index < width * width * width * width; ++index) {
            Codes codes = centre;
            std::int64_t rest = index;
            for (auto dimension : part_) {
                codes.value[dimension] += static_cast<std::int32_t>(rest % width - neighbourhood);
                rest /= width;
            }
            if (codes == from || !space_->allows(codes)) continue;
            const auto response = response_of(*space_, codes);
            if (!response) continue;
            const Point point = point_of(*response);
            if ((point[axis] - start[axis]) / progress < least_progress) continue;
            double distance = 0;
            for (std::size_t i = 0; i < point.size(); ++i) {
                distance += weight[i] * (point[i] - wanted[i]) * (point[i] - wanted[i]);
            }
            if (distance < best_distance) {
                best_distance = distance;
                best = std::move(codes);
            }
        }
        return best;
    }

    const CodeSpace* space_;
    std::array<std::size_t, response_axes> part_{};
    std::vector<std::size_t> others_;
    Point span_{};
    mutable std::map<std::tuple<Codes, std::size_t, int, std::size_t>, std::optional<Codes>> known_;
};

}  // namespace

std::unique_ptr<Moves> make_code_moves(const CodeSpace& space) {
    return std::make_unique<CodeMoves>(space);
}

std::unique_ptr<Moves> make_pair_moves(const CodeSpace& space) {
    return std::make_unique<PairMoves>(space);
}

std::unique_ptr<Moves> make_response_moves(const CodeSpace& space) {
    for (const Part part : parts) {
        const auto dimension = space.find(part);
        if (!dimension) return nullptr;
        const auto& bank = space.dimensions()[*dimension];
        const bool whole = static_cast<std::int64_t>(bank.nominal.size()) == range_of(bank) + 1 &&
                           std::all_of(bank.nominal.begin(), bank.nominal.end(), [](double value) {
                               return value > 0 && std::isfinite(value);
                           });
        if (!whole) return nullptr;
    }
    return std::make_unique<ResponseMoves>(space);
}

}  // namespace lanewright

#include "drivers/board/sentinel.hpp"

namespace lanewright {

Sentinel::Sentinel(const BoardFile& board) : field_(board.sentinel) {
    if (!field_) return;
    const FieldDescription* field = board.map.find(*field_);
    const RegisterDescription* reg = board.map.find(field_->reg);
    if (field == nullptr || reg == nullptr) return;
    ones_ = field->mask() >> field->low_bit;
    reset_value_ = field->reset.value_or(0);
    per_lane_ = reg->per_lane;
}

// Odd, so never 0. Neighbours differ by twice the multiplier, which is neither 0 nor 2 nor -2 in a
// field of 4 bits or more: stepping aside for the reset value does not meet them.
std::uint32_t Sentinel::value() const {
    constexpr std::uint32_t multiplier = 0x9E3779B5u;
    const auto place = static_cast<std::uint32_t>(2 * generation_ + 1);
    const std::uint32_t value = (place * multiplier) & ones_;
    return value == reset_value_ ? value ^ 2u : value;
}

void Sentinel::fall() {
    ++generation_;
    standing_.clear();
}

void Sentinel::found_fallen(std::uint64_t generation) {
    if (generation != generation_) return;
    ++resets_;
    fall();
}

void Sentinel::told_by_dialect(std::uint64_t resets) {
    if (resets == resets_of_dialect_) return;
    resets_of_dialect_ = resets;
    fall();
}

bool Sentinel::must_be_told(Lane lane) {
    std::uint64_t& told = told_.try_emplace(lane, resets_).first->second;
    if (told == resets_) return false;
    told = resets_;
    return true;
}

}  // namespace lanewright

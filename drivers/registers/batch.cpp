#include "drivers/registers/batch.hpp"

namespace lanewright {

std::chrono::microseconds Batch::longest() const {
    std::chrono::microseconds sum{};
    for (const Operation& operation : operations_) {
        if (const auto* wait = std::get_if<WaitUntil>(&operation)) sum += wait->timeout;
        if (const auto* pause = std::get_if<Pause>(&operation)) sum += pause->time;
    }
    return sum;
}

bool has_result(const Operation& operation) {
    if (const auto* write = std::get_if<Write>(&operation)) return write->read_back;
    return !std::holds_alternative<Pause>(operation);
}

}  // namespace lanewright

#pragma once
// Purpose:   results in assertions: REQUIRE(good(result)) prints the fault when there is one.
// Ownership: none.
// Threads:   the test's.

#include <catch2/catch.hpp>

#include "drivers/faults/fault.hpp"

namespace lanewright::test {

template <class T>
bool good(const Result<T>& result) {
    if (!result)
        UNSCOPED_INFO("fault: " << name_of(result.error().cause) << ": " << result.error().text());
    return result.has_value();
}

}  // namespace lanewright::test

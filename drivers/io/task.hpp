#pragma once
// Purpose:   the coroutine type of everything that waits: a value, or a Fault.
// Ownership: parameters by value; no capturing coroutine lambdas (C++ Core Guidelines CP.51).
// Threads:   resumed on the io thread.

#include <boost/asio/awaitable.hpp>

#include "drivers/faults/fault.hpp"

namespace lanewright {

template <class T>
using Task = boost::asio::awaitable<Result<T>>;

}  // namespace lanewright

// Work split over plain threads that live as long as the call: nothing is left behind that a fork
// could lose or a second call could find busy.
#pragma once

#include <algorithm>
#include <cstddef>
#include <exception>
#include <system_error>
#include <thread>
#include <vector>

namespace volterra {

// Calls work(begin, end) on consecutive parts of [0, size), at most `threads` of them and none
// smaller than `least` but the last. All workers are joined before the first exception, in the order
// of the parts, is rethrown.
template <class Work>
void for_each_part(std::size_t size, std::size_t threads, std::size_t least, Work&& work) {
    const std::size_t most = std::max<std::size_t>(1, size / std::max<std::size_t>(1, least));
    const std::size_t parts = std::clamp<std::size_t>(threads, 1, most);
    if (parts == 1) return work(std::size_t{0}, size);
    std::vector<std::exception_ptr> errors(parts);
    auto run = [&](std::size_t part) noexcept {
        try {
            work(size * part / parts, size * (part + 1) / parts);
        } catch (...) {
            errors[part] = std::current_exception();
        }
    };
    {
        std::vector<std::jthread> workers;
        workers.reserve(parts - 1);
        for (std::size_t part = 1; part < parts; ++part) {
            try {
                workers.emplace_back(run, part);
            } catch (const std::system_error&) {
                run(part);  // the system has no thread to give
            }
        }
        run(0);
    }
    for (const auto& error : errors)
        if (error) std::rethrow_exception(error);
}

}  // namespace volterra

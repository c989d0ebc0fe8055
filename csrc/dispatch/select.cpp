// Chooses the instruction set once per process.
#include <cstdlib>
#include <stdexcept>
#include <string>

#include "targets.hpp"

namespace volterra {

namespace {

struct table {
    const target_kernels* available[4] = {};
    table() {
        std::size_t n = 0;
        available[n++] = &kernels_baseline;
#if VOLTERRA_X86_TARGETS
        if (__builtin_cpu_supports("avx2") && __builtin_cpu_supports("fma"))
            available[n++] = &kernels_avx2;
        if (__builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512dq") &&
            __builtin_cpu_supports("avx512vl"))
            available[n++] = &kernels_avx512;
#endif
    }
};

const table& targets() {
    static const table instance;
    return instance;
}

const target_kernels& choose() {
    const auto& available = targets().available;
    const char* wanted = std::getenv("PYVOLTERRA_INSTRUCTION_SET");
    const target_kernels* best = nullptr;
    std::string names;
    for (const auto* kernels : available) {
        if (!kernels) break;
        if (wanted && std::string(wanted) == kernels->name) return *kernels;
        best = kernels;
        names += names.empty() ? kernels->name : std::string(", ") + kernels->name;
    }
    if (wanted && *wanted)
        throw std::invalid_argument("PYVOLTERRA_INSTRUCTION_SET=" + std::string(wanted) +
                                    ": this machine and build offer " + names);
    return *best;
}

}  // namespace

const target_kernels& selected_kernels() {
    static const target_kernels& kernels = choose();
    return kernels;
}

const target_kernels* const* available_kernels() { return targets().available; }

}  // namespace volterra

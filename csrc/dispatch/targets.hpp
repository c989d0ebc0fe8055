// The kernels that exist once per instruction set, as a table of plain functions.
#pragma once

#include <cstddef>

#include "volterra/adams.hpp"
#include "volterra/error_estimate.hpp"
#include "volterra/graded.hpp"
#include "volterra/graded_tangent.hpp"
#include "volterra/line_interpolation.hpp"
#include "volterra/sum_series.hpp"

namespace volterra {

struct target_kernels {
    const char* name;
    std::size_t adams_lanes;
    void (*solve_adams_block)(const adams_block&);
    std::size_t graded_lanes;
    void (*solve_graded_block)(const graded_block&);
    void (*solve_graded_tangents_block)(const tangent_block&);
    void (*sum_series)(const double* series, std::size_t stride, std::size_t terms,
                       const double* factor, std::size_t count, double* sum);
    void (*interpolate_line)(const line_block&);
    void (*estimate_error)(const estimate_row&);
};

extern const target_kernels kernels_baseline;
#if VOLTERRA_X86_TARGETS
extern const target_kernels kernels_avx2;
extern const target_kernels kernels_avx512;
#endif

// The best table this machine can run, or the one that the environment variable
// PYVOLTERRA_INSTRUCTION_SET names. Throws std::invalid_argument if that one does not exist or
// the machine cannot run it.
const target_kernels& selected_kernels();

// Every table this machine can run, the best one last; null-terminated.
const target_kernels* const* available_kernels();

}  // namespace volterra

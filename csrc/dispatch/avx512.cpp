// Instantiation unit: the kernels for the avx512 instruction set. No logic here.
#define VOLTERRA_TARGET avx512
#define VOLTERRA_X86_TARGETS 1
#include "targets.hpp"

namespace volterra {

const target_kernels kernels_avx512 = {"avx512", avx512::adams_lanes, avx512::solve_adams_block,
                                   avx512::graded_lanes, avx512::solve_graded_block,
                                   avx512::solve_graded_tangents_block,
                                   avx512::sum_series, avx512::interpolate_line,
                                   avx512::estimate_error};

}  // namespace volterra

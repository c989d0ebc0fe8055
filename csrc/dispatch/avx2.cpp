// Instantiation unit: the kernels for the avx2 instruction set. No logic here.
#define VOLTERRA_TARGET avx2
#define VOLTERRA_X86_TARGETS 1
#include "targets.hpp"

namespace volterra {

const target_kernels kernels_avx2 = {"avx2", avx2::adams_lanes, avx2::solve_adams_block,
                                   avx2::graded_lanes, avx2::solve_graded_block,
                                   avx2::solve_graded_tangents_block,
                                   avx2::sum_series, avx2::interpolate_line,
                                   avx2::estimate_error};

}  // namespace volterra

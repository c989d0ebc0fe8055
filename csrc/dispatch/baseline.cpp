// Instantiation unit: the kernels for the baseline instruction set. No logic here.
#define VOLTERRA_TARGET baseline
#define VOLTERRA_X86_TARGETS 1
#include "targets.hpp"

namespace volterra {

const target_kernels kernels_baseline = {"baseline", baseline::adams_lanes, baseline::solve_adams_block,
                                   baseline::graded_lanes, baseline::solve_graded_block,
                                   baseline::solve_graded_tangents_block,
                                   baseline::sum_series, baseline::interpolate_line,
                                   baseline::estimate_error};

}  // namespace volterra

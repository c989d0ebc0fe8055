// Which graded mesh a request needs: how many nodes per element, how fast the elements grow, and
// how small the first one must be.
//
// In units of the relaxation time of the linearised equation, t_* = (|c1|^2 + 4 |c0 c2|)^(-1/2 alpha),
// the solution looks much the same for all parameters: the interpolation error depends on (m, q),
// alpha and b/t_* alone, up to a modest factor. The ladder below was measured with it.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>

#include "volterra/graded_table.hpp"
#include "volterra/model.hpp"

namespace volterra {

struct graded_level {
    std::size_t nodes;  // m
    double ratio;       // q
    double first;       // largest b/t_*
    double accuracy;    // relative, of the nonlinear solves
};

// The number of elements u needs: the first one no longer than level.first t_*.
inline std::size_t graded_elements(const graded_level& level, const model_parameters& m,
                                   std::complex<double> u, double horizon) {
    const auto c = riccati(m, u);
    const double rate2 = std::norm(c.c1) + 4.0 * std::abs(c.c0) * c.c2;  // t_*^(-2 alpha)
    if (!(rate2 > 0.0)) return 1;
    const double ratio = std::log(horizon / level.first) + 0.5 * std::log(rate2) / m.alpha();
    const double k = std::ceil(ratio / std::log(level.ratio));
    return static_cast<std::size_t>(std::clamp(k + 1.0, 1.0, double{graded_most_elements}));
}

}  // namespace volterra

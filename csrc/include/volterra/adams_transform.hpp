// The uniform scheme carried from a list of u to log-transforms: packs u into lane blocks, calls
// the kernel of the chosen instruction set, and controls the error by step doubling.
//
// Every maturity has a mesh of its own (a mesh made for three years is useless at two days), and
// every u is refined on its own, so that no value depends on its companions in the call.
#pragma once

#include <algorithm>
#include <complex>
#include <cstddef>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/aligned_buffer.hpp"
#include "volterra/fractional_weights.hpp"
#include "volterra/model.hpp"
#include "volterra/uniform_functional.hpp"

namespace volterra {

// Everything the kernel needs to know of one mesh.
struct adams_mesh {
    uniform_weights weights;
    std::vector<std::vector<double>> squares;
    const double* leaves[adams_most_levels] = {};

    adams_mesh(double alpha, double maturity, std::size_t steps)
        : weights(fractional_weights(alpha, maturity / static_cast<double>(steps),
                                     std::max<std::size_t>(steps, 2))) {
        weights.lag.resize(2 * adams_reach(steps) + 1, 0.0);
        for (std::size_t size = toeplitz_leaf; size < steps; size *= 2) {
            squares.push_back(toeplitz_leaves(weights.lag, size));
            leaves[squares.size() - 1] = squares.back().data();
        }
    }
};

// values[m * u.size() + i]: functional m at u[i], on a mesh of exactly `steps` steps.
// psi, when not empty: (steps + 1) x u.size(), psi at every node.
inline void solve_adams(const target_kernels& kernels, const model_parameters& m,
                        std::span<const std::complex<double>> u, double maturity,
                        std::size_t steps, const functional_rows& rows,
                        std::span<std::complex<double>> values,
                        std::span<std::complex<double>> psi = {}) {
    const std::size_t lanes = kernels.adams_lanes, row = 2 * lanes;
    const adams_mesh mesh(m.alpha(), maturity, steps);
    aligned_buffer workspace(adams_workspace(steps, lanes));
    aligned_buffer c0(row), c1(row), block_values(rows.count * row);
    std::vector<double> block_psi(psi.empty() ? 0 : (steps + 1) * row);
    for (std::size_t start = 0; start < u.size(); start += lanes) {
        const std::size_t count = std::min(lanes, u.size() - start);
        double c2 = 0.0;
        for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes solve u = 0: psi = 0
            const auto c = riccati(m, i < count ? u[start + i] : 0.0);
            c0[i] = c.c0.real(), c0[lanes + i] = c.c0.imag();
            c1[i] = c.c1.real(), c1[lanes + i] = c.c1.imag();
            c2 = c.c2;
        }
        kernels.solve_adams_block({c0.data(), c1.data(), c2, steps, mesh.weights.diagonal,
                                   mesh.weights.lag.data(), mesh.weights.first.data(), mesh.leaves,
                                   rows.count, rows.f.data(), rows.psi.data(), block_values.data(),
                                   psi.empty() ? nullptr : block_psi.data(), workspace.data()});
        auto unpack = [&](const double* from, std::complex<double>* to) {
            for (std::size_t i = 0; i < count; ++i) to[i] = {from[i], from[lanes + i]};
        };
        for (std::size_t k = 0; k < rows.count; ++k)
            unpack(block_values.data() + k * row, values.data() + k * u.size() + start);
        for (std::size_t n = 0; !psi.empty() && n <= steps; ++n)
            unpack(block_psi.data() + n * row, psi.data() + n * u.size() + start);
    }
}

// log-transforms at one maturity on meshes of `steps` and `steps`/2; `errors` is the modulus of
// their difference in phi. The scheme's order is min(2, 1 + alpha), so the finer value is closer
// to the truth than that by a factor of two or more once the mesh resolves psi.
inline void adams_with_error(const target_kernels& kernels, const model_parameters& m,
                             const variance_curve& curve, std::span<const std::complex<double>> u,
                             double maturity, std::size_t steps,
                             std::span<std::complex<double>> values, std::span<double> errors) {
    std::vector<std::complex<double>> coarse(u.size());
    const std::size_t half = std::max<std::size_t>(1, steps / 2);
    solve_adams(kernels, m, u, maturity, half,
                uniform_functional(curve, m.mean_reversion, maturity, half, false), coarse);
    solve_adams(kernels, m, u, maturity, steps,
                uniform_functional(curve, m.mean_reversion, maturity, steps, false), values);
    for (std::size_t i = 0; i < u.size(); ++i)
        errors[i] = std::abs(std::exp(values[i]) - std::exp(coarse[i]));
}

inline constexpr std::size_t adams_first_steps = 64;
inline constexpr std::size_t adams_most_steps = 2048;

// Doubles the steps of each u until its estimate is below bounds[i], at most to adams_most_steps.
inline void adams_to_tolerance(const target_kernels& kernels, const model_parameters& m,
                               const variance_curve& curve,
                               std::span<const std::complex<double>> u, double maturity,
                               std::span<const double> bounds,
                               std::span<std::complex<double>> values, std::span<double> errors) {
    std::vector<std::size_t> open(u.size());
    for (std::size_t i = 0; i < open.size(); ++i) open[i] = i;
    std::vector<std::complex<double>> some_u(u.begin(), u.end()), previous, current;
    for (std::size_t steps = adams_first_steps; !open.empty(); steps *= 2) {
        const auto rows = uniform_functional(curve, m.mean_reversion, maturity, steps, false);
        current.resize(open.size());
        solve_adams(kernels, m, some_u, maturity, steps, rows, current);
        std::size_t kept = 0;
        for (std::size_t i = 0; i < open.size(); ++i) {
            const std::size_t at = open[i];
            values[at] = current[i];
            if (steps > adams_first_steps) {
                errors[at] = std::abs(std::exp(current[i]) - std::exp(previous[i]));
                if (errors[at] <= bounds[at]) continue;
            }
            open[kept] = at, some_u[kept] = some_u[i], current[kept] = current[i];
            ++kept;
        }
        open.resize(kept), some_u.resize(kept), current.resize(kept);
        previous.swap(current);
        if (steps == adams_most_steps) break;
    }
}

}  // namespace volterra

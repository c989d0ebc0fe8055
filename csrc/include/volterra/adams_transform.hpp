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

// Error of phi = exp(fine) from three meshes, each with half the steps of the next. The two
// differences of log phi give the rate of convergence, their geometric series what is left, doubled
// for safety. A mesh that does not resolve the solution converges slowly or not at all: then nothing
// is known but |phi(u)| <= phi(i Im u), the bound `largest`.
inline double adams_error(std::complex<double> coarse, std::complex<double> middle,
                          std::complex<double> fine, double largest) {
    constexpr double slowest = 0.7;  // rate of an order of one half
    const double last = std::abs(fine - middle), before = std::abs(middle - coarse);
    if (last == 0.0) return 0.0;
    const double rate = std::max(last / before, 0.25);
    if (!(rate < slowest)) return largest;
    const double left = 2.0 * last * rate / (1.0 - rate);
    if (!(left < 0.1)) return largest;  // the rate is not to be trusted yet
    return std::min(std::exp(fine.real()) * std::expm1(left), largest);
}

// log-transforms at one maturity on a mesh of `steps` steps, with errors from two coarser ones.
inline void adams_with_error(const target_kernels& kernels, const model_parameters& m,
                             const variance_curve& curve, std::span<const std::complex<double>> u,
                             double maturity, std::size_t steps, std::span<const double> largest,
                             std::span<std::complex<double>> values, std::span<double> errors) {
    std::vector<std::complex<double>> coarse(u.size()), middle(u.size());
    auto solve = [&](std::size_t n, std::span<std::complex<double>> into) {
        n = std::max<std::size_t>(1, n);
        solve_adams(kernels, m, u, maturity, n,
                    uniform_functional(curve, m.mean_reversion, maturity, n, false), into);
    };
    solve(steps / 4, coarse);
    solve(steps / 2, middle);
    solve(steps, values);
    for (std::size_t i = 0; i < u.size(); ++i)
        errors[i] = adams_error(coarse[i], middle[i], values[i], largest[i]);
}

inline constexpr std::size_t adams_first_steps = 64;
inline constexpr std::size_t adams_most_steps = 2048;

// Doubles the steps of each u until its estimate is below bounds[i], at most to adams_most_steps.
inline void adams_to_tolerance(const target_kernels& kernels, const model_parameters& m,
                               const variance_curve& curve,
                               std::span<const std::complex<double>> u, double maturity,
                               std::span<const double> bounds, std::span<const double> largest,
                               std::span<std::complex<double>> values, std::span<double> errors) {
    std::vector<std::size_t> open(u.size());
    for (std::size_t i = 0; i < open.size(); ++i) open[i] = i;
    std::vector<std::complex<double>> some_u(u.begin(), u.end()), older, previous, current;
    for (std::size_t steps = adams_first_steps; !open.empty(); steps *= 2) {
        const auto rows = uniform_functional(curve, m.mean_reversion, maturity, steps, false);
        current.resize(open.size());
        solve_adams(kernels, m, some_u, maturity, steps, rows, current);
        std::size_t kept = 0;
        for (std::size_t i = 0; i < open.size(); ++i) {
            const std::size_t at = open[i];
            values[at] = current[i];
            if (steps >= 4 * adams_first_steps) {
                errors[at] = adams_error(older[i], previous[i], current[i], largest[at]);
                if (errors[at] <= bounds[at]) continue;
            }
            open[kept] = at, some_u[kept] = some_u[i], current[kept] = current[i];
            if (!previous.empty()) previous[kept] = previous[i];
            ++kept;
        }
        open.resize(kept), some_u.resize(kept), current.resize(kept);
        if (!previous.empty()) previous.resize(kept);
        older.swap(previous), previous.swap(current);
        if (steps == adams_most_steps) break;
    }
}

}  // namespace volterra

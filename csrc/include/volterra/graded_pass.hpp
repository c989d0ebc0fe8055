// One solve of the graded scheme for a list of u at one rung of accuracy: packs them into lane blocks,
// each u on the mesh its own relaxation time asks for, and hands out the values at all maturities.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <limits>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/aligned_buffer.hpp"
#include "volterra/graded_functional.hpp"
#include "volterra/mesh.hpp"

namespace volterra {

namespace detail {

inline graded_block work_order(const graded_plan& plan) {
    graded_block b{};
    b.nodes = plan.shape->m, b.powers = plan.shape->x.data() + 1;
    auto matrices = [](const graded_operator& op) {
        return graded_matrices{op.own.data(), op.basis.data(), op.to_basis.data(), op.s.data(),
                               op.to_history.data(), op.paired};
    };
    b.start = matrices(plan.start), b.step = matrices(plan.step);
    b.from_zero = plan.from_zero.data(), b.from_first = plan.from_first.data();
    b.lag = plan.lag.data(), b.lags = plan.elements > 2 ? plan.elements - 2 : 0;
    b.extrapolation = plan.extrapolation.data(), b.tau_power = plan.tau_power.data();
    b.series = plan.series;
    b.total = plan.shape->total.data(), b.first_total = plan.first_total.data();
    b.growth = plan.step_scale;
    return b;
}

// int_0^T g0, the scale of rounding errors: an upper bound of int xi when curve and mean reversion
// are not negative.
inline double integrated_curve(const variance_curve& curve, double alpha, double maturity) {
    const bool driven = curve.form == curve_form::driven;
    double sum = driven ? curve.initial * maturity : 0.0;
    for_each_reversed_piece(curve, maturity, [&](std::size_t k, double from, double to) {
        const double level = std::abs(curve.levels[k]);
        sum += driven ? level * (std::pow(to, alpha + 1) - std::pow(from, alpha + 1)) /
                            std::tgamma(alpha + 2)
                      : level * (to - from);
    });
    return sum;
}

// A lower bound of the variance that multiplies F in log phi, which then falls at least as fast as
// this times int F. It only saves work where |phi| is small.
inline double least_variance(const variance_curve& curve, double mean_reversion) {
    const double lowest = *std::min_element(curve.levels.begin(), curve.levels.end());
    const bool driven = curve.form == curve_form::driven;
    const double least = driven ? (lowest < 0.0 ? 0.0 : curve.initial) : lowest;
    return mean_reversion < 0.0 ? 0.0 : std::max(least, 0.0);
}

// Points the work order at the mesh with `elements` elements.
inline void set_mesh(graded_block& b, const graded_meshes& meshes, std::size_t elements,
                     const graded_functional& w, const first_element_functional& first) {
    const std::size_t skipped = meshes.most - elements, m = meshes.plan->shape->m;
    b.elements = elements;
    b.scales = meshes.scales.data() + skipped;
    b.functionals = w.count, b.mix = w.mix;
    b.first_f = first.f.data(), b.first_psi = w.uses_psi ? first.psi.data() : nullptr;
    b.weights_f = w.f.data() + skipped * m * w.count;
    b.weights_psi = w.uses_psi ? w.psi.data() + skipped * m * w.count : nullptr;
    b.first_active = w.first_active.data() + skipped;
    b.lengths = meshes.edges.data() + skipped;
    b.settling = meshes.settling.data() + skipped;
}

}  // namespace detail

// What one solve leaves behind besides the values, one entry per u of the call.
struct graded_record {
    std::vector<char> solved;         // false where the solver failed
    std::vector<double> doubt;        // an indicator of the error of phi
    std::vector<double> guessed_from; // at maturities beyond this time phi was only guessed ...
    std::vector<double> guessed_size; // ... because |phi| is below this

    explicit graded_record(std::size_t n)
        : solved(n, 0), doubt(n, 0.0), guessed_from(n, std::numeric_limits<double>::infinity()),
          guessed_size(n, 0.0) {}
};

// One solve at one level of accuracy of the u numbered in `which`. values[r * u.size() + i]:
// functional r (maturity, or maturity and elementary curve when `basis`) at u[i]. Where |phi| is
// below negligible[i] it is not solved further. For the nodes of a line (graded_line.hpp) it is log phi
// that has to be accurate, and one mesh serves them all. Maturities must ascend.
inline void graded_pass(const target_kernels& kernels, const graded_level& level,
                        const model_parameters& m, const variance_curve& curve,
                        std::span<const std::complex<double>> u,
                        std::span<const std::size_t> which, std::span<const double> maturities,
                        bool basis, bool on_line, std::span<const double> negligible,
                        std::span<std::complex<double>> values, graded_record& record) {
    const std::size_t lanes = kernels.graded_lanes, row = 2 * lanes, n = which.size();
    const double horizon = maturities.back();
    std::vector<riccati_coefficients> c(n);
    std::vector<std::size_t> elements(n), count(graded_most_elements + 2, 0), order(n);
    for (std::size_t i = 0; i < n; ++i) {
        c[i] = riccati(m, u[which[i]]);
        elements[i] = graded_elements(level, m.alpha(), c[i], horizon);
    }
    if (on_line) std::fill(elements.begin(), elements.end(), *std::ranges::max_element(elements));
    for (const std::size_t k : elements) ++count[k + 1];
    std::size_t most = graded_most_elements;
    while (most > 1 && count[most + 1] == 0) --most;
    for (std::size_t k = 1; k < count.size(); ++k) count[k] += count[k - 1];
    for (std::size_t i = 0; i < n; ++i) order[count[elements[i]]++] = i;  // stable

    const auto shared_plan = plan_of(kernels, m.alpha(), level.nodes, level.ratio, most);
    const graded_plan& plan = *shared_plan;
    const graded_meshes meshes(plan, horizon, most);
    const auto functional = make_functional(meshes, curve, m.mean_reversion, maturities, basis);
    const std::size_t per_lane = 6;  // status, negligible, doubt, guessed, remainder, spare
    aligned_buffer inputs(2 * row), outputs(per_lane * lanes), block_values(functional.count * row);
    aligned_buffer workspace(graded_workspace(level.nodes, most, lanes));
    double *const c0 = inputs.data(), *const c1 = c0 + row;
    double *const status = outputs.data(), *const cut = status + lanes, *const doubt = cut + lanes,
           *const guessed = doubt + lanes, *const remainder = guessed + lanes;
    auto block = detail::work_order(plan);
    block.c0 = c0, block.c1 = c1, block.c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    block.accuracy = level.accuracy, block.of_logarithm = on_line;
    block.least_variance = detail::least_variance(curve, m.mean_reversion);
    block.typical_variance = detail::integrated_curve(curve, m.alpha(), horizon) / horizon;
    block.negligible = cut, block.doubt = doubt, block.guessed = guessed;
    block.remainder = remainder, block.status = status;
    block.values = block_values.data(), block.workspace = workspace.data();
    for (std::size_t start = 0; start < n;) {
        const std::size_t k = elements[order[start]], end = count[k];
        const auto first = make_first_functional(meshes, functional, k, curve, maturities, basis);
        detail::set_mesh(block, meshes, k, functional, first);
        for (; start < end; start += lanes) {
            const std::size_t filled = std::min(lanes, end - start);
            for (std::size_t i = 0; i < lanes; ++i) {  // idle lanes repeat the last one
                const std::size_t from = order[start + std::min(i, filled - 1)];
                c0[i] = c[from].c0.real(), c0[lanes + i] = c[from].c0.imag();
                c1[i] = c[from].c1.real(), c1[lanes + i] = c[from].c1.imag();
                cut[i] = negligible[which[from]];
            }
            kernels.solve_graded_block(block);
            bool contiguous = true;
            const std::size_t at = which[order[start]];
            for (std::size_t i = 0; i < filled; ++i) {
                const std::size_t to = which[order[start + i]];
                contiguous &= to == at + i;
                record.solved[to] = status[i] == 0.0;
                record.doubt[to] = doubt[i];
                const auto used = static_cast<std::size_t>(guessed[i]);
                record.guessed_from[to] = used < k ? block.lengths[used - 1]
                                                   : std::numeric_limits<double>::infinity();
                record.guessed_size[to] = used < k ? std::exp(remainder[i]) : 0.0;
            }
            for (std::size_t r = 0; r < functional.count; ++r) {
                const double* const re = block_values.data() + r * row;
                const double* const im = re + lanes;
                std::complex<double>* const to = values.data() + r * u.size();
                double finite = 0.0;
                for (std::size_t i = 0; i < filled; ++i) finite += re[i] * 0.0 + im[i] * 0.0;
                if (contiguous)
                    for (std::size_t i = 0; i < filled; ++i) to[at + i] = {re[i], im[i]};
                else
                    for (std::size_t i = 0; i < filled; ++i)
                        to[which[order[start + i]]] = {re[i], im[i]};
                if (finite == 0.0) continue;
                for (std::size_t i = 0; i < filled; ++i)
                    if (re[i] - re[i] != 0.0 || im[i] - im[i] != 0.0)
                        record.solved[which[order[start + i]]] = false;
            }
        }
        start = end;
    }
}

}  // namespace volterra

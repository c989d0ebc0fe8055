// log E[exp(iuX_T)] and its derivatives with respect to the parameters, by the graded scheme and its
// tangents (graded_tangent.hpp).
//
// The curve is held fixed as it is given: xi of a market curve; V0 and theta of a driven one.
#pragma once

#include <algorithm>
#include <atomic>
#include <cmath>
#include <complex>
#include <cstddef>
#include <limits>
#include <memory>
#include <numeric>
#include <span>
#include <vector>

#include "volterra/classical.hpp"
#include "volterra/explosion.hpp"
#include "volterra/graded_transform.hpp"
#include "volterra/parallel.hpp"
#include "volterra/tangent_pass.hpp"

namespace volterra {

// The u solved for at a time: few enough to keep the working memory small.
inline constexpr std::size_t sensitivity_chunk = 1024;

// Errors of the sensitivities are held below this times the tolerance, relative to the largest of
// the line.
inline constexpr double sensitivity_accuracy = 10.0;

namespace detail {

// From the raw channels to the parameters asked for, in the order hurst, vol_of_vol, correlation,
// mean_reversion: c1 = iu rho nu - lambda, c2 = nu^2/2, and lambda multiplies int xi psi in log phi.
inline void to_parameters(const model_parameters& m, const variance_curve& curve,
                          std::span<const std::complex<double>> u, std::size_t rows,
                          const sensitivity_request& wanted, const raw_rows& layout,
                          std::span<const std::complex<double>> raw,
                          std::span<std::complex<double>> sensitivities) {
    const std::size_t n = u.size(), size = rows * n;
    const std::complex<double>* const by_c1 = raw.data() + layout.first[channel_c1] * n;
    std::complex<double>* to = sensitivities.data();
    if (wanted.hurst) to = std::copy_n(raw.data() + layout.first[channel_alpha] * n, size, to);
    auto rotate = [&](double factor, const std::complex<double>* more, double weight) {
        for (std::size_t r = 0; r < rows; ++r)
            for (std::size_t i = 0; i < n; ++i, ++to) {  // factor i u d/dc1 + weight more
                const double x = u[i].real(), y = u[i].imag();
                const auto d = by_c1[r * n + i];
                double re = factor * (-y * d.real() - x * d.imag());
                double im = factor * (x * d.real() - y * d.imag());
                if (more) re += weight * more[r * n + i].real(), im += weight * more[r * n + i].imag();
                *to = {re, im};
            }
    };
    if (wanted.vol_of_vol) {
        const bool moves = m.vol_of_vol > 0.0;  // at 0 d(c2)/dnu is 0
        rotate(m.correlation, moves ? raw.data() + layout.first[channel_c2] * n : nullptr,
               moves ? 2.0 / m.vol_of_vol : 0.0);
    }
    if (wanted.correlation) rotate(m.vol_of_vol, nullptr, 0.0);
    if (wanted.mean_reversion) {
        const bool market = curve.form == curve_form::market;
        const std::complex<double>* const extra = raw.data() + layout.first[channel_psi] * n;
        for (std::size_t k = 0; k < size; ++k, ++to) *to = market ? extra[k] - by_c1[k] : -by_c1[k];
    }
}

// Serves the u of a line from an interpolant in every row. Returns false, and leaves `raw` alone, where
// that is not good enough: values to the tolerance, derivatives relative to their largest.
inline bool tangent_line(const target_kernels& kernels, const graded_level& level,
                         const model_parameters& m, const variance_curve& curve,
                         const line_task& line, std::span<const std::complex<double>> u,
                         std::span<const double> maturities, const sensitivity_request& wanted,
                         const raw_rows& layout, std::span<std::complex<double>> raw) {
    const std::size_t nodes = line.grid.s.size(), rows = maturities.size();
    graded_record record(nodes);
    std::vector<std::complex<double>> at_nodes(layout.all * nodes);
    std::vector<std::size_t> which(nodes);
    std::iota(which.begin(), which.end(), std::size_t{0});
    tangent_pass(kernels, level, m, curve, line.grid.u, which, maturities, wanted, layout, true,
                 at_nodes, record);
    if (std::ranges::count(record.solved, 0) != 0) return false;
    // d/dc1 and the functional of psi stay moderate along the line, unlike all other rows: their
    // interpolants are not scaled, which takes the opposite factor here.
    std::vector<char> flat(layout.all, 0);
    for (const auto c : {channel_c1, channel_psi})
        if (layout.kept[c]) std::fill_n(flat.data() + layout.first[c], rows, 1);
    for (std::size_t r = 0; r < layout.all; ++r)
        for (std::size_t j = 0; flat[r] && j < nodes; ++j)
            at_nodes[r * nodes + j] *= line.grid.scale[j];
    const auto tails = line_tails(line.grid, at_nodes);
    for (std::size_t r = 0; r < layout.all; ++r) {
        const std::complex<double>* const row = at_nodes.data() + r * nodes;
        if (r >= layout.first[channel_value]) {
            for (std::size_t j = 0; j < nodes; ++j)
                if (!(tails[r] * line.grid.scale[j] * std::exp(std::min(row[j].real(), 0.0)) <=
                      0.3 * wanted.tolerance))
                    return false;
            continue;
        }
        double largest = 0.0;  // square
        for (std::size_t j = 0; j < nodes; ++j) {
            const double scale = flat[r] ? line.grid.scale[j] : 1.0;
            largest = std::max(largest, std::norm(row[j]) / (scale * scale));
        }
        const double error = tails[r] * (flat[r] ? 1.0 : line.grid.scale[0]);  // nodes descend
        if (!(error <= sensitivity_accuracy * wanted.tolerance * std::sqrt(largest))) return false;
    }
    // values are the combination of the elementary curves where these are wanted
    const std::size_t served = layout.basis_rows ? layout.first[channel_value] : layout.all;
    interpolate_line(kernels, line.grid, std::span(at_nodes).first(served * nodes), u, line.members,
                     raw);
    const std::size_t n = u.size();
    std::vector<double> unscale;
    for (const std::size_t i : line.members) unscale.push_back(1.0 / line_scale(u[i].real()));
    for (std::size_t r = 0; r < served; ++r)
        for (std::size_t k = 0; flat[r] && k < unscale.size(); ++k)
            raw[r * n + line.members[k]] *= unscale[k];
    for (std::size_t k = 0; layout.basis_rows && k < curve.basis_size(); ++k) {
        const double amount = curve.amount(k);
        for (std::size_t t = 0; t < rows; ++t) {
            const std::complex<double>* const from = raw.data() + (layout.basis + k * rows + t) * n;
            std::complex<double>* const to = raw.data() + (layout.first[channel_value] + t) * n;
            for (const std::size_t i : line.members)
                to[i] = (k ? to[i] : std::complex<double>{}) + amount * from[i];
        }
    }
    return true;
}

}  // namespace detail

// Values (maturities x u), `sensitivities` (parameters x maturities x u) and, if wanted, `basis`
// (elementary curves x maturities x u). Maturities must ascend. Returns how many u no mesh could
// solve, or not to the tolerance; what is not solved is nan. Throws moment_explosion_error.
inline std::size_t solve_log_sensitivities(const target_kernels& kernels, const model_parameters& m,
                                           const variance_curve& curve,
                                           std::span<const std::complex<double>> u,
                                           std::span<const double> maturities,
                                           const sensitivity_request& wanted,
                                           std::span<std::complex<double>> values,
                                           std::span<std::complex<double>> sensitivities,
                                           std::span<std::complex<double>> basis) {
    const std::size_t n = u.size(), rows = maturities.size();
    const detail::raw_rows layout(wanted, m, curve, rows);
    error_bounds bounds;
    bounds.number(u, [&](double y) { require_finite_moment(m, -y, maturities); });

    const auto storage = std::make_unique_for_overwrite<double[]>(2 * layout.all * n);
    const std::span raw(reinterpret_cast<std::complex<double>*>(storage.get()), layout.all * n);
    std::vector<char> open(n, 1);
    const std::size_t coarsest = graded_level_for(wanted.tolerance);
    if (m.hurst < 0.5) {
        const std::vector<double> bound(n, wanted.tolerance);
        for (const auto& line : lines_of(m, curve, u, maturities, bounds, bound))
            if (detail::tangent_line(kernels, detail::tangent_ladder(m.hurst, coarsest), m, curve,
                                     line, u, maturities, wanted, layout, raw))
                for (const std::size_t i : line.members) open[i] = 0;
    }
    graded_record record(n);
    std::vector<std::size_t> which;
    std::complex<double>* const value = raw.data() + layout.first[channel_value] * n;
    for (std::size_t level = coarsest; level + 1 < graded_levels; ++level) {
        which.clear();
        for (std::size_t i = 0; i < n; ++i)
            if (open[i]) which.push_back(i);
        if (which.empty()) break;
        detail::tangent_pass(kernels, detail::tangent_ladder(m.hurst, level), m, curve, u, which,
                             maturities, wanted, layout, false, raw, record);
        for (const std::size_t i : which) {
            const double size = std::max(1.0, std::abs(value[(rows - 1) * n + i]));
            open[i] = !record.solved[i] || graded_doubt * record.doubt[i] > wanted.tolerance * size;
        }
    }
    constexpr double nan = std::numeric_limits<double>::quiet_NaN();
    std::size_t missed = 0;
    for (std::size_t i = 0; i < n; ++i) {
        if (u[i] == 0.0 || u[i] == std::complex<double>{0.0, -1.0}) {  // phi = 1 for all parameters
            for (std::size_t r = 0; r < layout.all; ++r) raw[r * n + i] = 0.0;
            continue;
        }
        missed += open[i] != 0;
        for (std::size_t r = 0; open[i] && !record.solved[i] && r < layout.all; ++r)
            raw[r * n + i] = {nan, nan};
    }
    if (m.hurst == 0.5) {
        std::vector<std::complex<double>> elementary(curve.basis_size());
        for (std::size_t t = 0; t < rows; ++t)
            for (std::size_t i = 0; i < n; ++i) {
                classical_basis(m, curve, u[i], maturities[t], elementary.data());
                value[t * n + i] = curve.combine(elementary.data());
                for (std::size_t k = 0; layout.basis_rows && k < elementary.size(); ++k)
                    raw[(layout.basis + k * rows + t) * n + i] = elementary[k];
            }
    }
    std::copy_n(value, rows * n, values.data());
    if (layout.basis_is_value)
        for (std::size_t k = 0; k < basis.size(); ++k) basis[k] = value[k] / curve.levels[0];
    else
        std::copy_n(raw.data() + layout.basis * n, basis.size(), basis.data());
    detail::to_parameters(m, curve, u, rows, wanted, layout, raw, sensitivities);
    return missed;
}

// The same in parts of at most sensitivity_chunk u, shared out among threads; no value depends on its
// companions, so the bits are the same for any number of threads.
inline std::size_t log_sensitivities_into(const target_kernels& kernels, const model_parameters& m,
                                          const variance_curve& curve,
                                          std::span<const std::complex<double>> u,
                                          std::span<const double> maturities,
                                          const sensitivity_request& wanted,
                                          std::span<std::complex<double>> values,
                                          std::span<std::complex<double>> sensitivities,
                                          std::span<std::complex<double>> basis) {
    const std::size_t n = u.size();
    if (values.empty()) return 0;
    std::atomic<std::size_t> missed{0};
    constexpr std::size_t least = 64;  // u: below that a thread costs more than it saves
    for_each_part(n, wanted.threads, least, [&](std::size_t part_begin, std::size_t part_end) {
        std::vector<std::complex<double>> part;
        for (std::size_t begin = part_begin; begin < part_end; begin += sensitivity_chunk) {
            const std::size_t size = std::min(part_end - begin, sensitivity_chunk);
            const auto nodes = u.subspan(begin, size);
            if (size == n) {
                missed += solve_log_sensitivities(kernels, m, curve, nodes, maturities, wanted,
                                                  values, sensitivities, basis);
                continue;
            }
            const std::span<std::complex<double>> targets[] = {values, sensitivities, basis};
            std::span<std::complex<double>> parts[3];
            part.resize((values.size() + sensitivities.size() + basis.size()) / n * size);
            std::size_t at = 0;
            for (std::size_t k = 0; k < 3; ++k) {
                parts[k] = std::span(part).subspan(at, targets[k].size() / n * size);
                at += parts[k].size();
            }
            missed += solve_log_sensitivities(kernels, m, curve, nodes, maturities, wanted, parts[0],
                                              parts[1], parts[2]);
            for (std::size_t k = 0; k < 3; ++k)
                for (std::size_t r = 0; r < targets[k].size() / n; ++r)
                    std::copy_n(parts[k].data() + r * size, size, targets[k].data() + r * n + begin);
        }
    });
    return missed;
}

}  // namespace volterra

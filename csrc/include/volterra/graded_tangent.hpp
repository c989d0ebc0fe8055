// Tangents of the graded scheme for one block of lanes: derivatives of the discrete solution with
// respect to c1, c2 and alpha, from psi as solve_graded_block left it.
//
// A tangent of psi = K * F, F = c0 + c1 psi + c2 psi^2, solves a linear equation on the same mesh,
//
//     (W^-1 - diag(s F'(psi))) dpsi = W^-1 dh + source,   s = left^alpha,
//
// with one elimination per element and lane for all tangents. `source` is s psi for c1 and s psi^2
// for c2; for alpha it is the derivative of the weights and of s. Only two tangents are needed: two
// scaling laws of the fractional kernel, psi -> k psi and t -> k t, give
//
//     c2 dpsi/dc2 = (t psi'/alpha - c1 dpsi/dc1 - psi)/2,   c2 dF/dc2 = (t F'/alpha - c1 dF/dc1)/2,
//
// which integrate to values at the ends of the integral. They lose digits where psi is nearly
// linear in c0, that is where |c0 c2| t^(2 alpha) is small; there the tangent of c2 is solved for.
//
// No allocation, no exceptions, no standard-library templates here: see simd.hpp.
#pragma once

#include "volterra/graded.hpp"

namespace volterra {

// One element's share of linear functionals, row r of which is the sum over all elements of
// carry int_0^left X + weights . X, X at the left edge and the m nodes of the element.
struct tangent_entries {
    std::size_t count;
    const std::size_t* rows;
    const double* carry;
    const double* weights;  // count x (m + 1)
    const double* points;   // the same, of t X(t) at the ends of the integrals
    const double* changes;  // the same, derivative of `weights` in alpha; null if there is none
};

// The functionals act on Z = F + mix psi (`on_f`) and on psi (`on_psi`); each is an array with one item
// per element. The rows of `basis_f` and `basis_psi` are values only.
struct tangent_functionals {
    const tangent_entries *on_f, *on_psi, *basis_f, *basis_psi;
};

// One block's work order.
struct tangent_block {
    const graded_block* solved;  // with psi, already solved
    // from graded_tangent_plan
    const double *start_inverse, *step_inverse, *start_change, *step_change;
    const double *from_zero, *from_zero_change, *from_first, *from_first_change, *lag, *lag_change;
    const double* first_total_change;
    double alpha;
    double mix;
    const double* log_lengths;  // elements - 1: log of left edges, like graded_block::lengths
    bool of_c1, of_c2, of_alpha, of_psi;  // of_c1 is implied by of_c2
    bool driven;                          // on_psi is a part of log phi, else what `mix` multiplies
    const double* direct;                 // lanes: 1 where c2's tangent is solved for, else 0
    tangent_functionals functionals;
    std::size_t rows, basis_rows;
    double* values;     // tangent_values rows of 2 x lanes
    double* workspace;  // tangent_workspace doubles
};

// values holds these, one after the other; an unwanted one is not written.
enum tangent_channel : std::size_t {
    channel_value,   // log phi
    channel_c1,      // d/dc1
    channel_c2,      // c2 d/dc2
    channel_alpha,   // d/dalpha
    channel_psi,     // the functional of psi: int theta psi, or int xi psi
    tangent_channels
};

// The channels, then the basis, then as many rows again as a channel has for the solver itself.
inline constexpr std::size_t tangent_values(std::size_t rows, std::size_t basis_rows) {
    return (tangent_channels + 1) * rows + basis_rows;
}

inline constexpr std::size_t tangent_workspace(std::size_t nodes, std::size_t elements,
                                               std::size_t lanes) {
    // G and its three tangents; right-hand sides and slopes; Z, three pairs of nodal tangents; sums
    return (4 * (1 + nodes * elements) + 4 * nodes + 7 * (nodes + 1) + 8) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

namespace graded_detail {

// Factors of `inverse` - diag(slope), `inverse` column-major: reciprocal pivots on the diagonal,
// rows of U divided by them. The first column of L stays real.
template <std::size_t m>
VOLTERRA_INLINE void factor_tangent(const double* inverse, const double* slope,
                                    complex_pack (&a)[m][m]) {
    VOLTERRA_UNROLL
    for (std::size_t i = 0; i < m; ++i)
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j) {
            a[i][j] = {broadcast(inverse[j * m + i]), broadcast(0.0)};
            if (i == j) a[i][j] = a[i][j] - load_complex(slope + i * row);
        }
    VOLTERRA_UNROLL
    for (std::size_t k = 0; k < m; ++k) {
        const complex_pack reciprocal = complex_pack{broadcast(1.0), broadcast(0.0)} / a[k][k];
        a[k][k] = reciprocal;
        VOLTERRA_UNROLL
        for (std::size_t j = k + 1; j < m; ++j)
            a[k][j] = k ? a[k][j] * reciprocal : a[k][j].re * reciprocal;
        VOLTERRA_UNROLL
        for (std::size_t i = k + 1; i < m; ++i)
            VOLTERRA_UNROLL
            for (std::size_t j = k + 1; j < m; ++j)
                a[i][j] = a[i][j] - (k ? a[i][k] * a[k][j] : a[i][k].re * a[k][j]);
    }
}

template <std::size_t m>
VOLTERRA_INLINE void solve_tangent(const complex_pack (&a)[m][m], complex_pack (&r)[m]) {
    VOLTERRA_UNROLL
    for (std::size_t k = 0; k < m; ++k) {
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < k; ++j) r[k] = r[k] - (j ? a[k][j] * r[j] : a[k][j].re * r[j]);
        r[k] = r[k] * a[k][k];
    }
    VOLTERRA_UNROLL
    for (std::size_t step = 1; step < m; ++step) {
        const std::size_t k = m - 1 - step;
        VOLTERRA_UNROLL
        for (std::size_t j = k + 1; j < m; ++j) r[k] = r[k] - a[k][j] * r[j];
    }
}

// h = the blocks of element k times dG, plus, where the blocks change too, their changes times G.
template <std::size_t m>
VOLTERRA_INLINE void tangent_history(const tangent_block& t, std::size_t k, const double* dG,
                                     const double* G, double* h) {
    constexpr std::size_t rows = tile_rows<m>;
    const std::size_t lags = t.solved->lags;
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs] = {};
        add_history<m>(acc, {t.from_zero, t.from_first, t.lag, lags}, k, top, dG);
        if (G) {
            add_history<m>(acc, {t.from_zero_change, t.from_first_change, t.lag_change, lags}, k, top,
                           G);
            multiply_tile<rows>(acc, (k ? t.step_change : t.start_change) + top, m,
                                G + (1 + k * m) * row, m);
        }
        store_tile<rows>(acc, h + top * row);
    }
}

// to += carry sum + weights . nodes, per entry; no carry if `sum` is null.
template <std::size_t m>
VOLTERRA_INLINE void add_entries(const tangent_entries& e, const double* weights,
                                 const double* nodes, const double* sum, double* to) {
    for (std::size_t n = 0; n < e.count; ++n) {
        const double* const w = weights + n * (m + 1);
        double* const out = to + e.rows[n] * row;
        pack acc[row_packs];
        VOLTERRA_UNROLL
        for (std::size_t c = 0; c < row_packs; ++c) {
            acc[c] = load(out + c * pack_width);
            if (sum) acc[c] += e.carry[n] * load(sum + c * pack_width);
        }
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j <= m; ++j)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                acc[c] += w[j] * load(nodes + j * row + c * pack_width);
        VOLTERRA_UNROLL
        for (std::size_t c = 0; c < row_packs; ++c) store(out + c * pack_width, acc[c]);
    }
}

// sum += length total . nodes
template <std::size_t m>
VOLTERRA_INLINE void add_total(const double* total, double length, const double* nodes, double* sum) {
    VOLTERRA_UNROLL
    for (std::size_t c = 0; c < row; c += pack_width) {
        pack acc = load(sum + c);
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j <= m; ++j) acc += (length * total[j]) * load(nodes + j * row + c);
        store(sum + c, acc);
    }
}

template <std::size_t m>
inline void solve_tangents(const tangent_block& t) {
    constexpr std::size_t tangents = 3;  // c1, c2, alpha
    const graded_block& b = *t.solved;
    const std::size_t size = (1 + m * b.elements) * row, nodal = (m + 1) * row;
    double* at = t.workspace;
    auto take = [&](std::size_t doubles) {
        double* const from = at;
        at += doubles;
        return from;
    };
    double* const G = take(size);
    double *dG[tangents], *rhs[tangents], *dpsi[tangents], *dz[tangents];
    double *z_sum, *psi_sum, *dz_sum[tangents], *dpsi_sum[tangents];
    for (auto& p : dG) p = take(size);
    for (auto& p : rhs) p = take(m * row);
    double *const slope = take(m * row), *const z = take(nodal);
    for (auto& p : dpsi) p = take(nodal);
    for (auto& p : dz) p = take(nodal);
    z_sum = take(row), psi_sum = take(row);
    for (auto& p : dz_sum) p = take(row);
    for (auto& p : dpsi_sum) p = take(row);
    const bool wanted[tangents] = {t.of_c1, t.of_c2, t.of_alpha};
    const std::size_t channel[tangents] = {channel_c1, channel_c2, channel_alpha};

    std::memset(t.values, 0, tangent_values(t.rows, t.basis_rows) * row * sizeof(double));
    std::memset(z_sum, 0, (2 + 2 * tangents) * row * sizeof(double));
    // at t = 0: F = c0, and all tangents vanish
    for (std::size_t c = 0; c < row; c += pack_width) {
        const pack c0 = load(b.c0 + c);
        store(z + c, c0);
        store(G + c, b.scales[0] * c0);
        store(dG[0] + c, broadcast(0.0));
        store(dG[1] + c, broadcast(0.0));
        store(dG[2] + c, t.log_lengths[0] * (b.scales[0] * c0));
        for (std::size_t n = 0; n < tangents; ++n) {
            store(dpsi[n] + c, broadcast(0.0));
            store(dz[n] + c, broadcast(0.0));
        }
    }
    auto out = [&](std::size_t which) { return t.values + which * t.rows * row; };
    double* const point = out(channel_c2);  // until the end: t Z(t) and t psi(t)
    double* const basis = out(tangent_channels);
    double* const direct = basis + t.basis_rows * row;  // by the tangent of c2
    const bool scaled_c2 = t.of_c1;  // cheap, and of_c2 says only that some lane is direct

    for (std::size_t k = 0; k < b.elements; ++k) {
        const double* const psi = b.psi + k * m * row;  // left edge and nodes
        const double s = b.scales[k ? k - 1 : 0], length = b.lengths[k ? k - 1 : 0];
        const double log_length = t.log_lengths[k ? k - 1 : 0];
        double* const own = G + (1 + k * m) * row;
        quadratic f[packs];
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            f[p] = scaled(b, p * pack_width, 1.0);
            VOLTERRA_UNROLL
            for (std::size_t j = 0; j < m; ++j) {
                const std::size_t c = j * row + p * pack_width;
                const complex_pack x = load_complex(psi + row + c), F = f[p].value(x);
                store_complex(own + c, broadcast(s) * F);
                store_complex(slope + c, broadcast(s) * f[p].derivative(x));
                store_complex(z + row + c, F + broadcast(t.mix) * x);
            }
        }
        for (std::size_t n = 0; n < tangents; ++n)
            if (wanted[n]) tangent_history<m>(t, k, dG[n], n == 2 ? G : nullptr, rhs[n]);
        const double inverse_s = 1.0 / s;
        for (std::size_t p = 0; p < packs && (t.of_c1 || t.of_alpha); ++p) {
            complex_pack a[m][m];
            factor_tangent<m>(k ? t.step_inverse : t.start_inverse, slope + p * pack_width, a);
            for (std::size_t n = 0; n < tangents; ++n) {
                if (!wanted[n]) continue;
                complex_pack r[m], source[m];
                VOLTERRA_UNROLL
                for (std::size_t j = 0; j < m; ++j) {
                    const std::size_t c = j * row + p * pack_width;
                    if (n == 2) {
                        source[j] = broadcast(log_length) * load_complex(own + c);
                    } else {
                        const complex_pack x = load_complex(psi + row + c);
                        source[j] = broadcast(s) * (n ? x * x : x);
                    }
                    r[j] = source[j] + load_complex(rhs[n] + c);
                }
                solve_tangent<m>(a, r);
                VOLTERRA_UNROLL
                for (std::size_t j = 0; j < m; ++j) {
                    const std::size_t c = j * row + p * pack_width;
                    const complex_pack moved = load_complex(slope + c) * r[j];
                    const complex_pack total = moved + source[j];
                    store_complex(dG[n] + (1 + k * m) * row + c, total);
                    store_complex(dpsi[n] + row + c, r[j]);
                    store_complex(dz[n] + row + c, broadcast(inverse_s) * (n == 2 ? moved : total) +
                                                       broadcast(t.mix) * r[j]);
                }
            }
        }

        const auto& of = t.functionals;
        const double* const total = k ? b.total : b.first_total;
        auto family = [&](const tangent_entries& e, const double* x, const double* x_sum,
                          double* const* dx, double* const* dx_sum) {
            if (e.count == 0) return;
            add_entries<m>(e, e.weights, x, x_sum, out(channel_value));
            if (scaled_c2) add_entries<m>(e, e.points, x, nullptr, point);
            for (std::size_t n = 0; n < tangents; ++n)
                if (wanted[n])
                    add_entries<m>(e, e.weights, dx[n], dx_sum[n],
                                   n == 1 ? direct : out(channel[n]));
            if (t.of_alpha && e.changes) add_entries<m>(e, e.changes, x, nullptr, out(channel_alpha));
        };
        family(of.on_f[k], z, z_sum, dz, dz_sum);
        if (t.driven) family(of.on_psi[k], psi, psi_sum, dpsi, dpsi_sum);
        const auto& extra = t.driven ? of.on_psi[k] : of.on_f[k];
        if (t.of_psi) add_entries<m>(extra, extra.weights, psi, psi_sum, out(channel_psi));
        if (t.basis_rows) {
            add_entries<m>(of.basis_f[k], of.basis_f[k].weights, z, z_sum, basis);
            if (t.driven) add_entries<m>(of.basis_psi[k], of.basis_psi[k].weights, psi, psi_sum, basis);
        }
        auto advance = [&](const double* x, double* x_sum, double* const* dx, double* const* dx_sum) {
            add_total<m>(total, length, x, x_sum);
            for (std::size_t n = 0; n < tangents && dx; ++n)
                if (wanted[n]) add_total<m>(total, length, dx[n], dx_sum[n]);
            if (dx && t.of_alpha && k == 0) add_total<m>(t.first_total_change, length, x, dx_sum[2]);
        };
        advance(z, z_sum, dz, dz_sum);
        if (t.driven)
            advance(psi, psi_sum, dpsi, dpsi_sum);
        else if (t.of_psi)
            advance(psi, psi_sum, nullptr, nullptr);
        copy_rows(z + m * row, 1, z);
        for (std::size_t n = 0; n < tangents; ++n) {
            if (!wanted[n]) continue;
            copy_rows(dpsi[n] + m * row, 1, dpsi[n]);
            copy_rows(dz[n] + m * row, 1, dz[n]);
        }
    }

    if (!scaled_c2) return;
    const double share = t.driven ? 1.0 : t.mix;
    for (std::size_t p = 0; p < packs; ++p) {
        const complex_pack c1 = load_complex(b.c1 + p * pack_width);
        const pack c2 = broadcast(b.c2);
        const mask by_tangent = load(t.direct + p * pack_width) > 0.5;
        for (std::size_t r = 0; r < t.rows; ++r) {
            const std::size_t c = r * row + p * pack_width;
            const complex_pack value = load_complex(out(channel_value) + c);
            complex_pack sum = broadcast(1.0 / t.alpha) * (load_complex(point + c) - value) -
                               c1 * load_complex(out(channel_c1) + c);
            if (share != 0.0) sum = sum - broadcast(share) * load_complex(out(channel_psi) + c);
            sum = broadcast(0.5) * sum;
            if (t.of_c2) sum = select(by_tangent, c2 * load_complex(direct + c), sum);
            store_complex(point + c, sum);
        }
    }
}

}  // namespace graded_detail

inline void solve_graded_tangents_block(const tangent_block& block) {
    switch (block.solved->nodes) {
        case 4: return graded_detail::solve_tangents<4>(block);
        case 6: return graded_detail::solve_tangents<6>(block);
        case 8: return graded_detail::solve_tangents<8>(block);
        case 10: return graded_detail::solve_tangents<10>(block);
    }
}

}  // namespace volterra::VOLTERRA_TARGET

// Stub order: see the driver in graded_transform.hpp. One block of lanes on one graded mesh.
//
// psi_i = h_i + sum_j W_ij G_j on every element, G = left^alpha F: the history h is a product with
// small dense blocks that depend on the lag only, the element itself is a nonlinear system of m
// unknowns per lane.
#pragma once

#include "volterra/simd.hpp"

namespace volterra {

// One block's work order. Split rows: `lanes` real parts, then `lanes` imaginary parts.
struct graded_block {
    const double* c0;  // 2 x lanes
    const double* c1;  // 2 x lanes
    double c2;
    double alpha;
    std::size_t nodes;     // m
    std::size_t elements;  // the first one included
    const double* scales;  // elements: left^alpha (the first element has that of the second)
    const double* times;   // 1 + elements x m, node times; times[0] = 0
    // blocks of graded_weights.hpp
    const double *first, *own_left, *own, *lag, *from_first, *extrapolation, *leading;
    // linear functionals: value_r = sum_n f[r][n] G_n + psi[r][n] psi_n, n over 1 + elements x m
    std::size_t functionals;
    const double* weights_f;
    const double* weights_psi;        // or null
    const std::size_t* first_active;  // per element: the functionals from this one on use it
    double* values;                   // functionals x 2 x lanes
    double* psi;                      // (1 + elements x m) x 2 x lanes, or null
    double* status;                   // lanes: 0 solved; k + 1 if element k failed
    double* history;                  // workspace
};

inline constexpr std::size_t graded_most_nodes = 10;

inline constexpr std::size_t graded_workspace(std::size_t nodes, std::size_t elements,
                                              std::size_t lanes) {
    return (1 + nodes * elements + 4 * graded_most_nodes) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

namespace graded_detail {

inline constexpr std::size_t packs = pack_width == 8 ? 2 : (pack_width == 4 ? 1 : 2);
inline constexpr std::size_t lanes = packs * pack_width;
inline constexpr std::size_t row = 2 * lanes;

VOLTERRA_INLINE complex_pack load_complex(const double* p) { return {load(p), load(p + lanes)}; }
VOLTERRA_INLINE void store_complex(double* p, complex_pack z) {
    store(p, z.re);
    store(p + lanes, z.im);
}
VOLTERRA_INLINE complex_pack select(decltype(pack{} < pack{}) mask, complex_pack a,
                                    complex_pack b) {
    return {mask ? a.re : b.re, mask ? a.im : b.im};
}
VOLTERRA_INLINE pack norm(complex_pack z) { return z.re * z.re + z.im * z.im; }
// a / b, and 0 where b = 0.
VOLTERRA_INLINE complex_pack safe_divide(complex_pack a, complex_pack b) {
    const pack size = norm(b);
    const pack scale = size > 0.0 ? 1.0 / size : broadcast(0.0);
    return {(a.re * b.re + a.im * b.im) * scale, (a.im * b.re - a.re * b.im) * scale};
}

// out[i] += sum_j w[i * stride + j] in[j]; rows of `in` and `out` are split lane rows.
template <std::size_t m>
VOLTERRA_INLINE void multiply_add(const double* w, std::size_t stride, const double* in,
                                  std::size_t columns, double* out) {
    constexpr std::size_t tile = m % 2 == 0 && m > 6 ? m / 2 : m;
    for (std::size_t top = 0; top < m; top += tile) {
        pack acc[tile][2 * packs];
        for (std::size_t i = 0; i < tile; ++i)
            for (std::size_t c = 0; c < 2 * packs; ++c)
                acc[i][c] = load(out + (top + i) * row + c * pack_width);
        for (std::size_t j = 0; j < columns; ++j) {
            pack x[2 * packs];
            for (std::size_t c = 0; c < 2 * packs; ++c) x[c] = load(in + j * row + c * pack_width);
            for (std::size_t i = 0; i < tile; ++i) {
                const pack a = broadcast(w[(top + i) * stride + j]);
                for (std::size_t c = 0; c < 2 * packs; ++c) acc[i][c] += a * x[c];
            }
        }
        for (std::size_t i = 0; i < tile; ++i)
            for (std::size_t c = 0; c < 2 * packs; ++c)
                store(out + (top + i) * row + c * pack_width, acc[i][c]);
    }
}

// A rational function of z = t^alpha with the first three terms of psi's power series and its
// limit, the stable root of the quadratic: psi = z (p0 + p1 z) / (1 + q1 z + q2 z^2).
struct starting_guess {
    complex_pack p0, p1, q1, q2;
    VOLTERRA_INLINE complex_pack at(double z) const {
        const pack x = broadcast(z);
        complex_pack numerator = p0 + x * p1;
        complex_pack denominator = q1 + x * q2;
        denominator = x * denominator;
        denominator.re += 1.0;
        return safe_divide(x * numerator, denominator);
    }
};

VOLTERRA_INLINE complex_pack stable_root(complex_pack c0, complex_pack c1, pack c2) {
    const complex_pack s = sqrt(c1 * c1 - (4.0 * c2) * c0);
    return safe_divide(broadcast(2.0) * c0, s - c1);
}

VOLTERRA_INLINE starting_guess make_guess(complex_pack c0, complex_pack c1, pack c2, double alpha) {
    const double g1 = __builtin_tgamma(1 + alpha), g2 = __builtin_tgamma(1 + 2 * alpha),
                 g3 = __builtin_tgamma(1 + 3 * alpha);
    const complex_pack r = stable_root(c0, c1, c2);
    const complex_pack b0 = broadcast(1 / g1) * c0;
    const complex_pack b1 = broadcast(g1 / g2) * (c1 * b0);
    const complex_pack b2 = broadcast(g2 / g3) * (c1 * b1 + c2 * (b0 * b0));
    const complex_pack q2 = safe_divide(b1 * b1 - b0 * b2, r * b1 + b0 * b0);
    const complex_pack q1 = safe_divide(r * q2 - b1, b0);
    return {b0, r * q2, q1, q2};
}

// One Newton step of psi = h + W G(psi) for one pack of lanes; returns the size of the step.
template <std::size_t m>
inline pack newton_step(const double* w, std::size_t stride, complex_pack c0, complex_pack c1,
                        pack c2, const double* h, double* psi) {
    complex_pack a[m][m], r[m], g[m], d[m];
    for (std::size_t j = 0; j < m; ++j) {
        const complex_pack x = load_complex(psi + j * row);
        const complex_pack cx = c2 * x;
        g[j] = c0 + (c1 + cx) * x;
        d[j] = c1 + cx + cx;
        r[j] = load_complex(h + j * row) - x;
    }
    for (std::size_t i = 0; i < m; ++i)
        for (std::size_t j = 0; j < m; ++j) {
            const pack wij = broadcast(w[i * stride + j]);
            r[i] = r[i] + wij * g[j];
            a[i][j] = {-wij * d[j].re, -wij * d[j].im};
            if (i == j) a[i][j].re += 1.0;
        }
    for (std::size_t k = 0; k < m; ++k) {
        const complex_pack one = {broadcast(1.0), broadcast(0.0)};
        const complex_pack inverse = one / a[k][k];
        r[k] = r[k] * inverse;
        for (std::size_t j = k + 1; j < m; ++j) a[k][j] = a[k][j] * inverse;
        for (std::size_t i = k + 1; i < m; ++i) {
            for (std::size_t j = k + 1; j < m; ++j) a[i][j] = a[i][j] - a[i][k] * a[k][j];
            r[i] = r[i] - a[i][k] * r[k];
        }
    }
    pack size = broadcast(0.0);
    for (std::size_t k = m; k-- > 0;) {
        for (std::size_t j = k + 1; j < m; ++j) r[k] = r[k] - a[k][j] * r[j];
        const pack n = norm(r[k]);
        size = n > size ? n : size;
    }
    for (std::size_t k = 0; k < m; ++k)
        store_complex(psi + k * row, load_complex(psi + k * row) + r[k]);
    return size;
}

template <std::size_t m>
inline void solve(const graded_block& b) {
    const std::size_t nodes = 1 + m * b.elements;
    double* const G = b.history;
    double* const h = G + nodes * row;
    double* const psi = h + m * row;

    std::memset(b.values, 0, b.functionals * row * sizeof(double));
    std::memset(b.status, 0, lanes * sizeof(double));
    for (std::size_t c = 0; c < row; c += pack_width)
        store(G + c, b.scales[0] * load(b.c0 + c));
    if (b.psi) std::memset(b.psi, 0, row * sizeof(double));

    for (std::size_t k = 0; k < b.elements; ++k) {
        double* const g = G + (1 + k * m) * row;  // this element's nodes
        std::memset(h, 0, m * row * sizeof(double));
        const double* w = k ? b.own : b.first + 1;
        const std::size_t stride = k ? m : m + 1;
        if (k == 0) {
            multiply_add<m>(b.first, m + 1, G, 1, h);
        } else {
            multiply_add<m>(b.from_first + (k - 1) * m * (m + 1), m + 1, G, m + 1, h);
            for (std::size_t l = 1; l < k; ++l)
                multiply_add<m>(b.lag + (k - l - 1) * m * m, m, G + (1 + l * m) * row, m, h);
        }
        const pack s = broadcast(b.scales[k]);
        for (std::size_t c = 0; c < lanes; c += pack_width) {
            const complex_pack a0 = load_complex(b.c0 + c), a1 = load_complex(b.c1 + c);
            const pack a2 = broadcast(b.c2);
            const complex_pack c0 = s * a0, c1 = s * a1;
            const pack c2 = s * a2;
            const starting_guess guess = make_guess(a0, a1, a2, b.alpha);
            for (std::size_t j = 0; j < m; ++j) {
                const double z = __builtin_pow(b.times[1 + k * m + j], b.alpha);
                store_complex(psi + j * row + c, guess.at(z));
            }
            for (int it = 0; it < 30; ++it) {
                const pack size = newton_step<m>(w, stride, c0, c1, c2, h + c, psi + c);
                const pack scale = norm(load_complex(psi + (m - 1) * row + c));
                bool done = true;
                for (std::size_t i = 0; i < pack_width; ++i)
                    done = done && (size[i] <= 1e-28 * scale[i]);
                if (done) break;
                if (it == 29)
                    for (std::size_t i = 0; i < pack_width; ++i)
                        if (!(size[i] <= 1e-20 * scale[i])) b.status[c + i] = k + 1.0;
            }
            for (std::size_t j = 0; j < m; ++j) {
                const complex_pack x = load_complex(psi + j * row + c);
                store_complex(g + j * row + c, c0 + (c1 + c2 * x) * x);
            }
        }
        if (b.psi) std::memcpy(b.psi + (1 + k * m) * row, psi, m * row * sizeof(double));
        for (std::size_t r = b.first_active[k]; r < b.functionals; ++r) {
            const std::size_t begin = k ? 1 + k * m : 0, end = 1 + (k + 1) * m;
            for (std::size_t c = 0; c < row; c += pack_width) {
                pack acc = load(b.values + r * row + c);
                for (std::size_t n = begin; n < end; ++n)
                    acc += b.weights_f[r * nodes + n] * load(G + n * row + c);
                if (b.weights_psi)
                    for (std::size_t j = 0; j < m; ++j)
                        acc += b.weights_psi[r * nodes + 1 + k * m + j] * load(psi + j * row + c);
                store(b.values + r * row + c, acc);
            }
        }
    }
}

}  // namespace graded_detail

inline constexpr std::size_t graded_lanes = graded_detail::lanes;

inline void solve_graded_block(const graded_block& block) {
    switch (block.nodes) {
        case 5: return graded_detail::solve<5>(block);
        case 6: return graded_detail::solve<6>(block);
        case 8: return graded_detail::solve<8>(block);
        case 10: return graded_detail::solve<10>(block);
    }
}

}  // namespace volterra::VOLTERRA_TARGET

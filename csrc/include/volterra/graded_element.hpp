// One element of the graded scheme for a block of lanes: the nonlinear system psi = h + W G(psi).
//
// W is one real m x m block for all lanes, G = left^alpha (c0 + c1 psi + c2 psi^2) acts node by node.
// With W^-1 = B S B^-1, S real in 2 x 2 blocks, a Newton step with one common derivative d costs two
// small real products and a few 2 x 2 solves,
//
//     psi <- B (S - d)^-1 [ B^-1 W^-1 h + B^-1 (G(psi) - d psi) ],
//
// and no factorisation per lane. Where that does not converge, or lands on another branch of the
// quadratic, full Newton steps with elimination start again from the left edge.
//
// Every lane is iterated until its own test is met and then left alone: its bits do not depend on
// the other lanes. No allocation, no exceptions, no standard-library templates: see simd.hpp.
#pragma once

#if defined(__AVX__)
#include <immintrin.h>
#endif

#include "volterra/graded_limits.hpp"
#include "volterra/simd.hpp"

namespace volterra {

// One element's weights to itself and the basis they are solved in; see graded_operator.
struct graded_matrices {
    const double *own, *basis, *to_basis, *s, *to_history;
    bool paired;
};

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

#define VOLTERRA_UNROLL _Pragma("GCC unroll 16")

namespace graded_detail {

inline constexpr std::size_t packs = pack_width == 8 ? 2 : 1;
inline constexpr double loosest = 1e-8;  // square of the least relative accuracy asked of psi
inline constexpr std::size_t lanes = packs * pack_width;
inline constexpr std::size_t row = 2 * lanes;
inline constexpr std::size_t row_packs = 2 * packs;

typedef decltype(pack{} < pack{}) mask;

VOLTERRA_INLINE complex_pack load_complex(const double* p) { return {load(p), load(p + lanes)}; }
VOLTERRA_INLINE void store_complex(double* p, complex_pack z) {
    store(p, z.re);
    store(p + lanes, z.im);
}
VOLTERRA_INLINE complex_pack select(mask which, complex_pack a, complex_pack b) {
    return {which ? a.re : b.re, which ? a.im : b.im};
}
VOLTERRA_INLINE pack norm(complex_pack z) { return z.re * z.re + z.im * z.im; }
VOLTERRA_INLINE pack larger(pack a, pack b) { return a > b ? a : b; }
VOLTERRA_INLINE pack smaller(pack a, pack b) { return a < b ? a : b; }
VOLTERRA_INLINE bool any(mask which) {
#if defined(__AVX512DQ__)
    return _mm512_movepi64_mask(reinterpret_cast<__m512i>(which)) != 0;
#elif defined(__AVX__)
    return _mm256_movemask_pd(reinterpret_cast<__m256d>(which)) != 0;
#else
    long long bits = 0;
    for (std::size_t i = 0; i < pack_width; ++i) bits |= which[i];
    return bits != 0;
#endif
}
// a / b, and 0 where b = 0.
VOLTERRA_INLINE complex_pack safe_divide(complex_pack a, complex_pack b) {
    const pack size = norm(b);
    const pack scale = size > 0.0 ? 1.0 / size : broadcast(0.0);
    return {(a.re * b.re + a.im * b.im) * scale, (a.im * b.re - a.re * b.im) * scale};
}

// acc[i] += sum_j w[j * m + i] in[j] for the rows i of one tile, the weights column-major.
template <std::size_t rows>
VOLTERRA_INLINE void multiply_tile(pack (&acc)[rows][row_packs], const double* w, std::size_t m,
                                   const double* in, std::size_t columns) {
    for (std::size_t j = 0; j < columns; ++j) {
        pack x[row_packs];
        VOLTERRA_UNROLL
        for (std::size_t c = 0; c < row_packs; ++c) x[c] = load(in + j * row + c * pack_width);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < rows; ++i) {
            const pack a = broadcast(w[j * m + i]);
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c) acc[i][c] += a * x[c];
        }
    }
}

template <std::size_t rows>
VOLTERRA_INLINE void store_tile(const pack (&acc)[rows][row_packs], double* to) {
    VOLTERRA_UNROLL
    for (std::size_t i = 0; i < rows; ++i)
        VOLTERRA_UNROLL
        for (std::size_t c = 0; c < row_packs; ++c) store(to + i * row + c * pack_width, acc[i][c]);
}

VOLTERRA_INLINE void copy_rows(const double* from, std::size_t rows, double* to) {
    for (std::size_t i = 0; i < rows * row; i += pack_width) store(to + i, load(from + i));
}

// Rows per register tile: accumulators, one row of input and one weight have to fit.
template <std::size_t m>
inline constexpr std::size_t tile_rows = m <= 6 ? m : m / 2;

// out = W in
template <std::size_t m>
VOLTERRA_INLINE void multiply(const double* w, const double* in, std::size_t columns, double* out) {
    constexpr std::size_t rows = tile_rows<m>;
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs] = {};
        multiply_tile<rows>(acc, w + top, m, in, columns);
        store_tile<rows>(acc, out + top * row);
    }
}

// The quadratic of one element: s (c0 + c1 psi + c2 psi^2).
struct quadratic {
    complex_pack c0, c1;
    pack c2;
    VOLTERRA_INLINE complex_pack value(complex_pack x) const { return c0 + (c1 + c2 * x) * x; }
    VOLTERRA_INLINE complex_pack derivative(complex_pack x) const { return c1 + (2.0 * c2) * x; }
};

// A rational function of z = t^alpha with the first three terms of psi's power series and its
// limit, the stable root of the quadratic: psi = z (p0 + p1 z) / (1 + q1 z + q2 z^2).
struct global_guess {
    complex_pack p0, p1, q1, q2;
    VOLTERRA_INLINE complex_pack at(double z) const {
        const pack x = broadcast(z);
        complex_pack denominator = x * (q1 + x * q2);
        denominator.re += 1.0;
        return safe_divide(x * (p0 + x * p1), denominator);
    }
};

// The limit of psi.
VOLTERRA_INLINE complex_pack stable_root(const quadratic& f) {
    const complex_pack root = sqrt(f.c1 * f.c1 - (4.0 * f.c2) * f.c0);
    return safe_divide(broadcast(2.0) * f.c0, root - f.c1);
}

VOLTERRA_INLINE global_guess make_guess(const quadratic& f, const double* series) {
    const complex_pack r = stable_root(f);
    const complex_pack b0 = broadcast(series[0]) * f.c0;
    const complex_pack b1 = broadcast(series[1]) * (f.c1 * b0);
    const complex_pack b2 = broadcast(series[2]) * (f.c1 * b1 + f.c2 * (b0 * b0));
    const complex_pack q2 = safe_divide(b1 * b1 - b0 * b2, r * b1 + b0 * b0);
    return {b0, r * q2, safe_divide(r * q2 - b1, b0), q2};
}

// One full Newton step of psi = h + W G(psi), W column-major, for one pack of lanes. Returns the
// largest squared component of the step; `damping` multiplies it.
template <std::size_t m>
inline pack newton_step(const double* w, const quadratic& f, const double* h, double* psi,
                        double damping) {
    complex_pack a[m][m], r[m];
    VOLTERRA_UNROLL
    for (std::size_t j = 0; j < m; ++j) r[j] = load_complex(h + j * row) - load_complex(psi + j * row);
    VOLTERRA_UNROLL
    for (std::size_t j = 0; j < m; ++j) {
        const complex_pack x = load_complex(psi + j * row), g = f.value(x), d = f.derivative(x);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < m; ++i) {
            const pack wij = broadcast(w[j * m + i]);
            r[i] = r[i] + wij * g;
            a[i][j] = {(i == j ? 1.0 : 0.0) - wij * d.re, -wij * d.im};
        }
    }
    VOLTERRA_UNROLL
    for (std::size_t k = 0; k < m; ++k) {
        const complex_pack inverse = complex_pack{broadcast(1.0), broadcast(0.0)} / a[k][k];
        r[k] = r[k] * inverse;
        VOLTERRA_UNROLL
        for (std::size_t j = k + 1; j < m; ++j) a[k][j] = a[k][j] * inverse;
        VOLTERRA_UNROLL
        for (std::size_t i = k + 1; i < m; ++i) {
            VOLTERRA_UNROLL
            for (std::size_t j = k + 1; j < m; ++j) a[i][j] = a[i][j] - a[i][k] * a[k][j];
            r[i] = r[i] - a[i][k] * r[k];
        }
    }
    pack size = broadcast(0.0);
    for (std::size_t k = m; k-- > 0;) {
        VOLTERRA_UNROLL
        for (std::size_t j = k + 1; j < m; ++j) r[k] = r[k] - a[k][j] * r[j];
        size = larger(norm(r[k]), size);
        store_complex(psi + k * row, load_complex(psi + k * row) + broadcast(damping) * r[k]);
    }
    return size;
}

// Full Newton for the lanes of `open`; returns the lanes that did not converge.
template <std::size_t m>
inline mask newton(const double* w, const quadratic& f, const double* h, double* psi, mask open,
                   pack strict) {
    const double sharp = 1e-28;
    for (int step = 0; step < 40 && any(open); ++step) {
        complex_pack before[m];
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j) before[j] = load_complex(psi + j * row);
        // after 12 plain steps, half steps: they calm a cycle
        const pack size = newton_step<m>(w, f, h, psi, step < 12 ? 1.0 : 0.5);
        pack scale = broadcast(0.0);
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j) {
            const complex_pack x = select(open, load_complex(psi + j * row), before[j]);
            store_complex(psi + j * row, x);
            scale = larger(scale, norm(x));
        }
        // The step that follows one of relative size e has relative size e^2 or so.
        const pack relative = smaller(1.0 / (strict * scale), broadcast(loosest));
        const pack bound = step < 12 ? 1e-2 * sqrt(larger(relative, broadcast(sharp))) : broadcast(sharp);
        open = open & ~(size <= bound * scale);
    }
    return open;
}

// Whether every node has the root that continues the one at the left edge. Given the other nodes,
// psi_i solves a quadratic, and the root that tends to its history as the weight w = W_ii tends
// to 0 is the one with Re(1 - w G') > 0. False for nan.
template <std::size_t m>
VOLTERRA_INLINE mask on_branch(const graded_matrices& w, const quadratic& f, const double* psi) {
    pack worst = broadcast(0.0);
    VOLTERRA_UNROLL
    for (std::size_t j = 0; j < m; ++j) {
        const pack slope = f.c1.re + 2.0 * f.c2 * load(psi + j * row);
        const pack amount = broadcast(w.own[j * m + j]) * slope;
        worst = amount <= worst ? worst : amount;
    }
    return worst < 0.9;
}

// The factors of (S - d)^-1 for one pack: per 2 x 2 block its inverse.
template <std::size_t m>
struct shifted_factors {
    complex_pack f11[m / 2], f12[m / 2], f21[m / 2], f22[m / 2];
};

template <std::size_t m>
VOLTERRA_INLINE void factor(const double* s, complex_pack d, shifted_factors<m>& to) {
    constexpr std::size_t blocks = m / 2;
    complex_pack determinant[blocks];
    pack size[blocks], before[blocks];  // before[k]: the product of the sizes 0 .. k - 1
    pack product = broadcast(1.0);
    VOLTERRA_UNROLL
    for (std::size_t k = 0; k < blocks; ++k) {
        const double* const b = s + 2 * k * (m + 1);
        const complex_pack p = {b[0] - d.re, -d.im}, q = {b[m + 1] - d.re, -d.im};
        determinant[k] = p * q;
        determinant[k].re -= b[1] * b[m];
        to.f11[k] = q, to.f22[k] = p;
        size[k] = norm(determinant[k]);
        before[k] = product;
        product *= size[k];
    }
    pack inverse = 1.0 / product;  // the only division
    VOLTERRA_UNROLL
    for (std::size_t step = 0; step < blocks; ++step) {
        const std::size_t k = blocks - 1 - step;
        const double* const b = s + 2 * k * (m + 1);
        const pack scale = inverse * before[k];
        inverse *= size[k];
        const complex_pack reciprocal = {determinant[k].re * scale, -determinant[k].im * scale};
        to.f11[k] = to.f11[k] * reciprocal;
        to.f22[k] = to.f22[k] * reciprocal;
        to.f12[k] = broadcast(-b[1]) * reciprocal;
        to.f21[k] = broadcast(-b[m]) * reciprocal;
    }
}

// y <- (S - d)^-1 y
template <std::size_t m>
VOLTERRA_INLINE void solve_shifted(const double* s, const shifted_factors<m> (&f)[packs], double* y) {
    VOLTERRA_UNROLL
    for (std::size_t step = 0; step < m / 2; ++step) {
        const std::size_t k = m - 2 * step;
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            double* const at = y + p * pack_width;
            complex_pack one = load_complex(at + (k - 2) * row), two = load_complex(at + (k - 1) * row);
            if constexpr (m > graded_diagonal_nodes) {
                VOLTERRA_UNROLL
                for (std::size_t j = k; j < m; ++j) {
                    const complex_pack x = load_complex(at + j * row);
                    one = one - broadcast(s[(k - 2) * m + j]) * x;
                    two = two - broadcast(s[(k - 1) * m + j]) * x;
                }
            }
            const std::size_t b = k / 2 - 1;
            store_complex(at + (k - 2) * row, f[p].f11[b] * one + f[p].f12[b] * two);
            store_complex(at + (k - 1) * row, f[p].f21[b] * one + f[p].f22[b] * two);
        }
    }
}

// One step psi <- B (S - d)^-1 [ h + B^-1 (G(psi) - d psi) ], slope = c1 - d. With `measure` the lanes
// that are not open keep their psi, and the squares of the step and of psi are returned, the step as
// seen at three nodes, psi at the last one.
template <std::size_t m, bool measure>
VOLTERRA_INLINE void newton_with_common_slope(const graded_matrices& w, const quadratic (&f)[packs],
                                              const complex_pack (&slope)[packs],
                                              const shifted_factors<m> (&factors)[packs],
                                              const double* h, double* psi, double* y,
                                              const mask (&open)[packs], pack* size, pack* height) {
    constexpr std::size_t rows = tile_rows<m>;
    VOLTERRA_UNROLL
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs];
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < rows; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                acc[i][c] = load(h + (top + i) * row + c * pack_width);
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j) {
            pack x[row_packs];
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const complex_pack v = load_complex(psi + j * row + p * pack_width);
                const complex_pack g = f[p].c0 + (slope[p] + f[p].c2 * v) * v;
                x[p] = g.re, x[packs + p] = g.im;
            }
            VOLTERRA_UNROLL
            for (std::size_t i = 0; i < rows; ++i) {
                const pack a = broadcast(w.to_basis[j * m + top + i]);
                VOLTERRA_UNROLL
                for (std::size_t c = 0; c < row_packs; ++c) acc[i][c] += a * x[c];
            }
        }
        store_tile<rows>(acc, y + top * row);
    }
    solve_shifted<m>(w.s, factors, y);
    VOLTERRA_UNROLL
    for (std::size_t p = 0; measure && p < packs; ++p) size[p] = broadcast(0.0);
    VOLTERRA_UNROLL
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs] = {};
        multiply_tile<rows>(acc, w.basis + top, m, y, m);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < rows; ++i)
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const std::size_t at = (top + i) * row + p * pack_width;
                complex_pack x = {acc[i][p], acc[i][packs + p]};
                if constexpr (measure) {
                    const complex_pack old = load_complex(psi + at);
                    if (top + i == 0 || top + i == m / 2 - 1 || top + i == m - 1)
                        size[p] = larger(size[p], norm(x - old));
                    if (top + i == m - 1) height[p] = norm(x);
                    x = select(open[p], x, old);
                }
                store_complex(psi + at, x);
            }
    }
}

// Solves psi = h + W G(psi) on one element from the guess in `psi`; `h` holds B^-1 W^-1 h, `left` the
// value at the left edge. `strict` is the inverse square of the absolute accuracy asked of psi. The work rows
// `y` are overwritten. Returns through `open` the lanes that did not converge.
template <std::size_t m>
VOLTERRA_INLINE void solve_element(const graded_matrices& w, const quadratic (&f)[packs],
                                   const double* h, const double* left, double* psi, double* y,
                                   const pack (&strict)[packs], mask (&open)[packs]) {
    pack last[packs];
    complex_pack slope[packs];
    shifted_factors<m> factors[packs];
    VOLTERRA_UNROLL
    for (std::size_t p = 0; p < packs; ++p) {
        open[p] = f[p].c2 == f[p].c2;
        const complex_pack first = load_complex(psi + p * pack_width);
        const complex_pack end = load_complex(psi + (m - 1) * row + p * pack_width);
        const complex_pack middle = load_complex(psi + (m / 2) * row + p * pack_width);
        const complex_pack d = f[p].derivative(middle);
        slope[p] = f[p].c1 - d;
        // Before a contraction has been seen: how far the derivative strays from d.
        const pack away = larger(norm(first - middle), norm(end - middle));
        last[p] = 4.0 * (4.0 + norm(d)) / (4.0 * f[p].c2 * f[p].c2 * away);
        factor<m>(w.s, d, factors[p]);
    }
    bool working = w.paired;
    for (int step = 0; step < 12 && working; ++step) {
        if (step == 0) {
            newton_with_common_slope<m, false>(w, f, slope, factors, h, psi, y, open, nullptr, nullptr);
            continue;
        }
        pack size[packs], height[packs];
        newton_with_common_slope<m, true>(w, f, slope, factors, h, psi, y, open, size, height);
        working = false;
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            // What is left is the last step times theta/(1 - theta), theta the observed contraction.
            const pack by = step > 1 ? size[p] : broadcast(1.0);
            const pack left_over = size[p] * by;
            const mask done = ((left_over * strict[p] <= last[p]) & (by < 0.25 * last[p]) &
                               (left_over <= loosest * height[p] * last[p])) |
                              (size[p] <= 1e-30 * height[p]);
            last[p] = size[p];
            open[p] = open[p] & ~done;
            working |= any(open[p]);
        }
    }
    bool suspicious = false;
    for (std::size_t p = 0; p < packs; ++p) {
        open[p] = open[p] | ~on_branch<m>(w, f[p], psi + p * pack_width);
        suspicious |= any(open[p]);
    }
    if (!suspicious) return;
    multiply<m>(w.to_history, h, m, y);
    for (std::size_t p = 0; p < packs; ++p) {
        const std::size_t c = p * pack_width;
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j)
            store_complex(psi + j * row + c, select(open[p], load_complex(left + c),
                                                    load_complex(psi + j * row + c)));
        const mask again = open[p];
        open[p] = newton<m>(w.own, f[p], y + c, psi + c, open[p], strict[p]);
        open[p] = open[p] | (again & ~on_branch<m>(w, f[p], psi + c));
    }
}

}  // namespace graded_detail

}  // namespace volterra::VOLTERRA_TARGET

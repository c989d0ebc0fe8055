// The graded scheme for one block of lanes: psi = K * [c0 + c1 psi + c2 psi^2] on a geometric mesh.
//
// With G = left^alpha F, the nodes of an element satisfy psi = h + W G(psi), W one real m x m block
// for all elements and lanes, h the history. W^-1 = Q S Q^T is kept in real Schur form, and one
// Newton step with a common derivative d costs two small real products and a triangular solve,
//
//     psi <- Q (S - d)^-1 [ Q^T W^-1 h + Q^T (G(psi) - d psi) ],
//
// with no factorisation per lane. Q^T W^-1 is already contained in the history weights of the plan.
// Where this does not converge, and on the first element, full Newton steps with elimination follow.
//
// Every lane is iterated until its own test is met and then left alone: its bits do not depend on
// the other lanes. No allocation, no exceptions, no standard-library templates: see simd.hpp.
#pragma once

#if defined(__AVX__)
#include <immintrin.h>
#endif

#include "volterra/simd.hpp"

namespace volterra {

// One element's weights to itself and their Schur form; see graded_operator.
struct graded_matrices {
    const double *own, *q, *q_transposed, *s, *to_history;
    bool paired;
};

// One block's work order. All rows are split: `lanes` real parts, then `lanes` imaginary parts.
struct graded_block {
    const double* c0;  // 2 x lanes
    const double* c1;  // 2 x lanes
    double c2;
    std::size_t nodes;     // m
    std::size_t elements;  // of this mesh, the first one included
    const double* scales;  // elements - 1: left^alpha of all but the first, which has scales[0]
    const double* powers;  // m: (node/b)^alpha on the first element
    // from graded_plan
    graded_matrices start, step;
    const double *from_zero, *from_first, *lag, *extrapolation, *tau_power, *series;
    std::size_t lags;  // blocks in `lag`
    // linear functionals: value_r = sum_n f[n][r] (G + left^alpha mix psi)_n + p[n][r] psi_n
    std::size_t functionals;
    double mix;
    const double* first_f;            // (m + 1) x functionals: t = 0 and the first element
    const double* first_psi;          // the same, or null
    const double* weights_f;          // (elements - 1) m x functionals
    const double* weights_psi;        // the same; read if first_psi is not null
    const std::size_t* first_active;  // [1 .. elements - 1]: functionals before it do not use it
    double accuracy;                  // relative accuracy asked of psi at the nodes
    double* values;                   // functionals x 2 x lanes
    double* psi;                      // (1 + elements m) x 2 x lanes, or null
    double* status;                   // lanes: 0 solved, k + 1 if the solver failed on element k
    double* workspace;                // graded_workspace doubles
};

inline constexpr std::size_t graded_most_nodes = 10;

inline constexpr std::size_t graded_workspace(std::size_t nodes, std::size_t elements,
                                              std::size_t lanes) {
    return (1 + nodes * elements + 4 * (nodes + 1)) * 2 * lanes;
}

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

#define VOLTERRA_UNROLL _Pragma("GCC unroll 16")

namespace graded_detail {

inline constexpr std::size_t packs = pack_width == 8 ? 2 : 1;
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

VOLTERRA_INLINE void copy_rows(const double* from, std::size_t rows, double* to) {
    for (std::size_t i = 0; i < rows * row; i += pack_width) store(to + i, load(from + i));
}

// Rows per register tile: accumulators, one row of input and one weight have to fit.
template <std::size_t m>
inline constexpr std::size_t tile_rows = m <= 6 ? m : m / 2;

// out = (add ? out : 0) + W in
template <std::size_t m>
VOLTERRA_INLINE void multiply(const double* w, const double* in, std::size_t columns, double* out) {
    constexpr std::size_t rows = tile_rows<m>;
    for (std::size_t top = 0; top < m; top += rows) {
        pack acc[rows][row_packs] = {};
        multiply_tile<rows>(acc, w + top, m, in, columns);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < rows; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                store(out + (top + i) * row + c * pack_width, acc[i][c]);
    }
}

// The quadratic of one element: s (c0 + c1 psi + c2 psi^2).
struct quadratic {
    complex_pack c0, c1;
    pack c2;
    VOLTERRA_INLINE complex_pack value(complex_pack x) const { return c0 + (c1 + c2 * x) * x; }
    VOLTERRA_INLINE complex_pack derivative(complex_pack x) const { return c1 + (2.0 * c2) * x; }
};

VOLTERRA_INLINE quadratic scaled(const graded_block& b, std::size_t c, double scale) {
    const pack s = broadcast(scale);
    return {s * load_complex(b.c0 + c), s * load_complex(b.c1 + c), s * broadcast(b.c2)};
}

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

VOLTERRA_INLINE global_guess make_guess(const quadratic& f, const double* series) {
    const complex_pack root = sqrt(f.c1 * f.c1 - (4.0 * f.c2) * f.c0);
    const complex_pack r = safe_divide(broadcast(2.0) * f.c0, root - f.c1);
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
                   double accuracy) {
    const double goal = accuracy * accuracy, sharp = 1e-28;
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
        const double bound = step < 12 ? (goal > sharp ? __builtin_sqrt(goal) * 1e-2 : 1e-16) : sharp;
        open = open & ~(size <= larger(broadcast(bound), broadcast(sharp)) * scale);
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
    complex_pack f11[m / 2], f22[m / 2], inverse[m / 2];
};

template <std::size_t m>
VOLTERRA_INLINE void factor(const double* s, complex_pack d, shifted_factors<m>& to) {
    VOLTERRA_UNROLL
    for (std::size_t k = 0; k < m; k += 2) {
        const double s12 = s[k * m + k + 1], s21 = s[(k + 1) * m + k];
        const complex_pack p = {s[k * m + k] - d.re, -d.im};
        const complex_pack q = {s[(k + 1) * m + k + 1] - d.re, -d.im};
        complex_pack det = p * q;
        det.re -= s12 * s21;
        const complex_pack inverse = complex_pack{broadcast(1.0), broadcast(0.0)} / det;
        to.inverse[k / 2] = inverse;
        to.f11[k / 2] = q * inverse;
        to.f22[k / 2] = p * inverse;
    }
}

// y <- (S - d)^-1 y for one pack.
template <std::size_t m>
VOLTERRA_INLINE void solve_shifted(const double* s, const shifted_factors<m>& f, complex_pack (&y)[m]) {
    for (std::size_t k = m; k >= 2; k -= 2) {
        complex_pack &one = y[k - 2], &two = y[k - 1];
        VOLTERRA_UNROLL
        for (std::size_t j = k; j < m; ++j) {
            one = one - broadcast(s[(k - 2) * m + j]) * y[j];
            two = two - broadcast(s[(k - 1) * m + j]) * y[j];
        }
        const std::size_t p = k / 2 - 1;
        const complex_pack a = broadcast(s[(k - 2) * m + k - 1]) * (f.inverse[p] * two);
        const complex_pack b = broadcast(s[(k - 1) * m + k - 2]) * (f.inverse[p] * one);
        one = f.f11[p] * one - a;
        two = f.f22[p] * two - b;
    }
}

// values += f-weights (G + mix psi) + psi-weights psi over the nodes of one element.
template <std::size_t m>
VOLTERRA_INLINE void accumulate_functionals(const graded_block& b, std::size_t k, const double* g,
                                            const double* psi) {
    const std::size_t at = k ? (k - 1) * m * b.functionals : b.functionals;
    const double* const weights_f = (k ? b.weights_f : b.first_f) + at;
    const double* const weights_psi = b.first_psi ? (k ? b.weights_psi : b.first_psi) + at : nullptr;
    constexpr std::size_t tile = 3;
    std::size_t r = k ? b.first_active[k] : 0;
    auto rows = [&]<std::size_t n>() {
        pack acc[n][row_packs];
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < n; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                acc[i][c] = load(b.values + (r + i) * row + c * pack_width);
        multiply_tile<n>(acc, weights_f + r, b.functionals, g, m);
        if (weights_psi)
            multiply_tile<n>(acc, weights_psi + r, b.functionals, psi, m);
        VOLTERRA_UNROLL
        for (std::size_t i = 0; i < n; ++i)
            VOLTERRA_UNROLL
            for (std::size_t c = 0; c < row_packs; ++c)
                store(b.values + (r + i) * row + c * pack_width, acc[i][c]);
    };
    for (; r + tile <= b.functionals; r += tile) rows.template operator()<tile>();
    for (; r < b.functionals; ++r) rows.template operator()<1>();
}

// Solves psi = h + W G(psi) on one element from the guess in `psi`; `h` holds Q^T W^-1 h, `left` the
// value at the left edge. The work rows `y` are overwritten. Returns through `open` the lanes that did not converge.
template <std::size_t m>
VOLTERRA_INLINE void solve_element(const graded_matrices& w, const quadratic (&f)[packs],
                                   const double* h, const double* left, double* psi, double* y,
                                   double accuracy, mask (&open)[packs]) {
    pack last[packs], spread[packs];
    complex_pack slope[packs];
    shifted_factors<m> factors[packs];
    VOLTERRA_UNROLL
    for (std::size_t p = 0; p < packs; ++p) {
        open[p] = f[p].c2 == f[p].c2;
        last[p] = broadcast(0.0);
        const complex_pack first = load_complex(psi + p * pack_width);
        const complex_pack end = load_complex(psi + (m - 1) * row + p * pack_width);
        const complex_pack middle = load_complex(psi + (m / 2) * row + p * pack_width);
        const complex_pack d = f[p].derivative(middle);
        slope[p] = f[p].c1 - d;
        const pack away = larger(norm(first - middle), norm(end - middle));
        spread[p] = 4.0 * f[p].c2 * f[p].c2 * away / (4.0 + norm(d));
        factor<m>(w.s, d, factors[p]);
    }
    bool working = w.paired;
    constexpr std::size_t rows = tile_rows<m>;
    for (int step = 0; step < 12 && working; ++step) {
        // y = Q^T W^-1 h + Q^T (G(psi) - d psi)
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
                    const pack a = broadcast(w.q_transposed[j * m + top + i]);
                    VOLTERRA_UNROLL
                    for (std::size_t c = 0; c < row_packs; ++c) acc[i][c] += a * x[c];
                }
            }
            VOLTERRA_UNROLL
            for (std::size_t i = 0; i < rows; ++i)
                VOLTERRA_UNROLL
                for (std::size_t c = 0; c < row_packs; ++c)
                    store(y + (top + i) * row + c * pack_width, acc[i][c]);
        }
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            complex_pack x[m];
            const std::size_t c = p * pack_width;
            VOLTERRA_UNROLL
            for (std::size_t j = 0; j < m; ++j) x[j] = load_complex(y + j * row + c);
            solve_shifted<m>(w.s, factors[p], x);
            VOLTERRA_UNROLL
            for (std::size_t j = 0; j < m; ++j) store_complex(y + j * row + c, x[j]);
        }
        // psi = Q y, and the size of the step
        pack size[packs] = {}, height[packs] = {};
        VOLTERRA_UNROLL
        for (std::size_t top = 0; top < m; top += rows) {
            pack acc[rows][row_packs] = {};
            multiply_tile<rows>(acc, w.q + top, m, y, m);
            VOLTERRA_UNROLL
            for (std::size_t i = 0; i < rows; ++i)
                VOLTERRA_UNROLL
                for (std::size_t p = 0; p < packs; ++p) {
                    const std::size_t at = (top + i) * row + p * pack_width;
                    const complex_pack x = {acc[i][p], acc[i][packs + p]};
                    const complex_pack old = load_complex(psi + at);
                    size[p] = larger(size[p], norm(x - old));
                    height[p] = larger(height[p], norm(x));
                    store_complex(psi + at, select(open[p], x, old));
                }
        }
        working = false;
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) {
            // What is left is the last step times theta/(1 - theta), theta the observed
            // contraction; before one has been seen, how far the derivative strays from d.
            const pack by = step ? size[p] : spread[p], from = step ? last[p] : broadcast(1.0);
            const pack goal = height[p] * (0.25 * accuracy * accuracy);
            last[p] = size[p];
            const mask done = ((size[p] * by <= goal * from) & (by < 0.25 * from)) |
                              (size[p] <= 1e-30 * height[p]);
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
        open[p] = newton<m>(w.own, f[p], y + c, psi + c, open[p], accuracy);
        open[p] = open[p] | (again & ~on_branch<m>(w, f[p], psi + c));
    }
}

template <std::size_t m>
inline void solve(const graded_block& b) {
    double* const G = b.workspace;                          // 1 + elements m rows
    double* const h = G + (1 + m * b.elements) * row;       // m rows
    double* const y = h + m * row;                          // m rows
    double* const psi_edge = y + m * row;                   // m + 1 rows: left edge, then nodes
    double* const psi = psi_edge + row;
    double* const z = psi_edge + (m + 1) * row;             // m rows

    std::memset(b.values, 0, b.functionals * row * sizeof(double));
    std::memset(b.status, 0, lanes * sizeof(double));
    for (std::size_t c = 0; c < row; c += pack_width) {
        store(G + c, b.scales[0] * load(b.c0 + c));
        store(psi_edge + c, broadcast(0.0));
        if (b.psi) store(b.psi + c, broadcast(0.0));
        for (std::size_t r = 0; r < b.functionals; ++r)
            store(b.values + r * row + c, b.first_f[r] * load(G + c));
    }

    for (std::size_t k = 0; k < b.elements; ++k) {
        double* const g = G + (1 + k * m) * row;  // this element's nodes
        const double scale = b.scales[k ? k - 1 : 0];
        constexpr std::size_t rows = tile_rows<m>;
        for (std::size_t top = 0; top < m; top += rows) {
            pack acc[rows][row_packs] = {};
            if (k == 0) {
                multiply_tile<rows>(acc, b.from_zero + top, m, G, 1);
            } else {
                multiply_tile<rows>(acc, b.from_first + (k - 1) * m * (m + 1) + top, m, G, m + 1);
                multiply_tile<rows>(acc, b.lag + (b.lags + 1 - k) * m * m + top, m,
                                    G + (1 + m) * row, (k - 1) * m);
            }
            VOLTERRA_UNROLL
            for (std::size_t i = 0; i < rows; ++i)
                VOLTERRA_UNROLL
                for (std::size_t c = 0; c < row_packs; ++c)
                    store(h + (top + i) * row + c * pack_width, acc[i][c]);
        }
        quadratic f[packs];
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p) f[p] = scaled(b, p * pack_width, scale);
        if (k >= 2) {
            multiply<m>(b.extrapolation, psi_edge, m + 1, y);
            copy_rows(psi + (m - 1) * row, 1, psi_edge);
            copy_rows(y, m, psi);
        } else {
            if (k == 1) copy_rows(psi + (m - 1) * row, 1, psi_edge);
            const double* const powers = k ? b.tau_power : b.powers;
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const global_guess guess = make_guess(scaled(b, p * pack_width, 1.0), b.series);
                VOLTERRA_UNROLL
                for (std::size_t j = 0; j < m; ++j)
                    store_complex(psi + j * row + p * pack_width, guess.at(scale * powers[j]));
            }
        }
        mask open[packs];
        solve_element<m>(k ? b.step : b.start, f, h, psi_edge, psi, y, b.accuracy, open);
        VOLTERRA_UNROLL
        for (std::size_t p = 0; p < packs; ++p)
            for (std::size_t i = 0; i < pack_width; ++i)
                if (open[p][i] && b.status[p * pack_width + i] == 0.0)
                    b.status[p * pack_width + i] = static_cast<double>(k + 1);
        VOLTERRA_UNROLL
        for (std::size_t j = 0; j < m; ++j)
            VOLTERRA_UNROLL
            for (std::size_t p = 0; p < packs; ++p) {
                const std::size_t at = j * row + p * pack_width;
                const complex_pack x = load_complex(psi + at), value = f[p].value(x);
                store_complex(g + at, value);
                if (b.mix != 0.0) store_complex(z + at, value + broadcast(scale * b.mix) * x);
            }
        if (b.psi) copy_rows(psi, m, b.psi + (1 + k * m) * row);
        accumulate_functionals<m>(b, k, b.mix != 0.0 ? z : g, psi);
    }
}

}  // namespace graded_detail

inline constexpr std::size_t graded_lanes = graded_detail::lanes;

inline void solve_graded_block(const graded_block& block) {
    switch (block.nodes) {
        case 4: return graded_detail::solve<4>(block);
        case 6: return graded_detail::solve<6>(block);
        case 8: return graded_detail::solve<8>(block);
        case 10: return graded_detail::solve<10>(block);
    }
}

}  // namespace volterra::VOLTERRA_TARGET

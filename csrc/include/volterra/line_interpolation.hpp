// Interpolation of log phi along a horizontal line of u, once per instruction set.
//
// L(x) = log phi(x + iy) / scale(x) has an even real and an odd imaginary part, so L at the positive
// ones of 2N Chebyshev nodes of the first kind in s = asinh(x) gives it at all 2N. In barycentric
// form, with d_j = w_j / (s^2 - s_j^2) and w_j = (-1)^j sin(theta_j),
//
//     Re L(s) = sum d_j s_j Re L_j / sum d_j s_j,   Im L(s) = s sum d_j Im L_j / sum d_j s_j.
//
// Source of the barycentric form: Barycentric Lagrange Interpolation, SIAM Review 46, 2004,
// doi 10.1137/S0036144502417715 (from memory, reproduced).
#pragma once

#include "volterra/simd.hpp"

namespace volterra {

// One line's work order.
struct line_block {
    std::size_t nodes;       // N
    const double* square;    // N: s_j^2
    const double* weight;    // N: w_j
    const double* height;    // N: s_j
    std::size_t rows;        // functions interpolated
    const double* even;      // rows x N: s_j Re L_j
    const double* odd;       // rows x N: Im L_j
    std::size_t count;       // points, padded to a multiple of line_points
    const double* s;         // count
    const double* scale;     // count: what the interpolant is multiplied by
    double* values;          // rows x 2 x count: real parts, then imaginary parts
    double* workspace;       // N x line_points
};

inline constexpr std::size_t line_points = 32;  // points in flight

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

inline void interpolate_line(const line_block& b) {
    constexpr std::size_t wide = vector_registers == 32 ? 4 : 2;  // packs of points at a time
    constexpr std::size_t step = wide * pack_width;
    static_assert(line_points % step == 0);
    double* const d = b.workspace;
    for (std::size_t at = 0; at < b.count; at += step) {
        pack s[wide], square[wide], sum[wide] = {};
        for (std::size_t c = 0; c < wide; ++c) {
            s[c] = load(b.s + at + c * pack_width);
            square[c] = s[c] * s[c];
        }
        for (std::size_t j = 0; j < b.nodes; ++j)
            for (std::size_t c = 0; c < wide; ++c) {
                pack apart = square[c] - broadcast(b.square[j]);
                apart = apart == 0.0 ? broadcast(1e-290) : apart;  // at a node: its value alone
                const pack value = broadcast(b.weight[j]) / apart;
                sum[c] += broadcast(b.height[j]) * value;
                store(d + j * step + c * pack_width, value);
            }
        for (std::size_t c = 0; c < wide; ++c) sum[c] = load(b.scale + at + c * pack_width) / sum[c];
        auto rows = [&]<std::size_t together>(std::size_t r) {
            pack re[together][wide] = {}, im[together][wide] = {};
            for (std::size_t j = 0; j < b.nodes; ++j) {
                pack value[wide];
                for (std::size_t c = 0; c < wide; ++c) value[c] = load(d + j * step + c * pack_width);
                for (std::size_t k = 0; k < together; ++k) {
                    const pack e = broadcast(b.even[(r + k) * b.nodes + j]);
                    const pack o = broadcast(b.odd[(r + k) * b.nodes + j]);
                    for (std::size_t c = 0; c < wide; ++c) {
                        re[k][c] += e * value[c];
                        im[k][c] += o * value[c];
                    }
                }
            }
            for (std::size_t k = 0; k < together; ++k) {
                double* const to = b.values + (r + k) * 2 * b.count + at;
                for (std::size_t c = 0; c < wide; ++c) {
                    store(to + c * pack_width, re[k][c] * sum[c]);
                    store(to + b.count + c * pack_width, s[c] * (im[k][c] * sum[c]));
                }
            }
        };
        // two rows at a time: enough independent sums to keep the multipliers busy
        std::size_t r = 0;
        for (; r + 2 <= b.rows; r += 2) rows.template operator()<2>(r);
        if (r < b.rows) rows.template operator()<1>(r);
    }
}

}  // namespace volterra::VOLTERRA_TARGET

// The error of phi from two solutions, one row (one maturity) at a time, once per instruction set.
//
//     |phi| ( 4 |d| + (1.2 r + least) max(1, |log phi|) + 5 tail + floor ),
//
// d the difference of log phi, tail what interpolation may neglect,
// r the largest |d| / max(1, |log phi|) at this and all shorter maturities: a difference can vanish
// by chance at one maturity, hardly at all of them. For the same reason 0.3 |phi d| is added to the
// estimate of the maturity before. The floor is 8 ulp of the terms that log phi is a sum of.
#pragma once

#include "volterra/simd.hpp"

namespace volterra {

struct estimate_row {
    std::size_t count;
    const double* values;    // count complex numbers: log phi
    const double* finer;     // the same from the finer mesh
    const double* c0;        // count: |c0|
    const double* least;     // count: what the finer solution itself may be off, relative
    double* relative;        // count: r so far, 0 at the first maturity; updated
    const double* spread;    // count: what `tail` is multiplied by
    double tail;
    double integral;         // of the variance curve up to the maturity
    double* estimate;        // count
    double* before;          // the estimate one maturity before, or null
};

}  // namespace volterra

namespace volterra::VOLTERRA_TARGET {

// exp(x) to 1e-6 relative, 0 below -690; x is capped at 690.
VOLTERRA_INLINE pack rough_exp(pack x) {
    const pack capped = x < 690.0 ? (x > -690.0 ? x : broadcast(-690.0)) : broadcast(690.0);
    const pack y = 1.4426950408889634 * capped;
    const pack magic = broadcast(6755399441055744.0);  // 1.5 x 2^52: rounds to an integer
    const pack whole = (y + magic) - magic;
    const pack f = 0.6931471805599453 * (y - whole);
    const pack series =
        1.0 + f * (1.0 + f * (0.5 + f * (1 / 6.0 + f * (1 / 24.0 + f * (1 / 120.0)))));
    const pack value = power_of_two(whole) * series;
    return x > -690.0 ? value : broadcast(0.0);
}

VOLTERRA_INLINE void estimate_pack(const estimate_row& b, std::size_t at, std::size_t size) {
    double v_re[pack_width] = {}, v_im[pack_width] = {}, f_re[pack_width] = {}, f_im[pack_width] = {};
    double c[pack_width] = {}, l[pack_width] = {}, r[pack_width] = {}, w[pack_width] = {};
    for (std::size_t i = 0; i < size; ++i) {
        v_re[i] = b.values[2 * (at + i)], v_im[i] = b.values[2 * (at + i) + 1];
        f_re[i] = b.finer[2 * (at + i)], f_im[i] = b.finer[2 * (at + i) + 1];
        c[i] = b.c0[at + i], l[i] = b.least[at + i], r[i] = b.relative[at + i];
        w[i] = b.spread[at + i];
    }
    const pack re = load(v_re), im = load(v_im);
    const pack d_re = load(f_re) - re, d_im = load(f_im) - im;
    const pack modulus = rough_exp(re);
    pack scale = sqrt(re * re + im * im);
    scale = scale > 1.0 ? scale : broadcast(1.0);
    // |exp(d) - 1| for small d, never below it
    const pack step = sqrt(d_re * d_re + d_im * d_im);
    const pack larger = rough_exp(d_re < 0.0 ? broadcast(0.0) : d_re) + 1.0;
    const pack difference = step < 1.0 ? step * (1.0 + step) : larger;
    const pack now = difference / scale, so_far = load(r);
    const pack relative = now > so_far ? now : so_far;
    const pack floor = 1.7763568394002505e-15 * (load(c) * broadcast(b.integral) + scale);
    const pack total = modulus * (4.0 * difference + (1.2 * relative + load(l)) * scale +
                                  (5.0 * b.tail) * load(w) + floor);
    const pack shown = 0.3 * (modulus * difference);
    double keep[pack_width], out[pack_width], more[pack_width];
    store(keep, relative), store(out, total), store(more, shown);
    for (std::size_t i = 0; i < size; ++i) {
        b.relative[at + i] = keep[i], b.estimate[at + i] = out[i];
        if (b.before) b.before[at + i] += more[i];
    }
}

inline void estimate_error(const estimate_row& b) {
    std::size_t at = 0;
    for (; at + pack_width <= b.count; at += pack_width) estimate_pack(b, at, pack_width);
    if (at < b.count) estimate_pack(b, at, b.count - at);
}

}  // namespace volterra::VOLTERRA_TARGET

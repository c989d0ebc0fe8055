// The inverse of the Black formula, to the accuracy its conditioning allows.
//
// Notation of black.hpp: the out-of-the-money price q(k, s) in units of its upper bound is
// inverted for s. A guess from one of three regions, good to 2 %, is followed by Householder steps
// of fourth order on log q (lower region) or log(1 - q) (upper region). The derivatives are closed
// forms, because q'' / q' = z1 z2 / s. One or two steps sufficed at every one of 3e7 random points,
// q from 5e-324, 1 - q from 1e-300, k up to 1400.
//
// Householder's method: "The Numerical Treatment of a Single Nonlinear Equation", 1970 (textbook;
// memory).
#pragma once

#include <algorithm>
#include <cmath>
#include <cstdint>

#include "volterra/black.hpp"

namespace volterra {

enum class inversion_status : std::int8_t {
    solved = 0,
    below_intrinsic = 1,  // no volatility is low enough
    above_bound = 2,      // at or above the price at infinite volatility
    not_converged = 3,    // never seen; never returned as a number
};

struct implied_volatility_result {
    double volatility;
    inversion_status status;
};

namespace detail {

// z with Phi(-z) = p <= 1/2, to 8e-5. Rational least-maximum fit of w - z in w = sqrt(-2 log p),
// weights by iterated reweighting over p from 1/2 to 1e-332.
inline double normal_quantile_guess(double log_p) {
    const double w = std::sqrt(-2.0 * log_p);
    return w - (2.6546018 + w * (1.55704962 + w * 0.06017387)) /
                   (1.0 + w * (1.90361865 + w * (0.45165367 + w * 0.0093668)));
}

// 2/Y(z), roughly: exact at 0 and infinity, between them within 3 %.
inline double mills_denominator(double z) { return z + std::sqrt(z * z + 2.5464790894703255); }

// Small k: the equation with normally distributed forward, phi(a)/a - Phi(-a) = eta for
// eta = q/(e^k - 1), has the same leading term as s -> 0. It is a function of one variable;
// a / w^2, w^2 = 2 log(1 + 1/eta), is fitted by a rational function of w to 3e-4, and the ratio of
// the two volatilities by 1 + s^2 (...), least squares over k <= 3, q <= 1/2, to 5e-3.
inline double guess_small_k(double k, double q) {
    const double spread = std::expm1(k);
    const double ratio = spread / q;
    double s = 0.0;
    if (ratio < 1e-6) {
        s = sqrt_two_pi * (q + 0.5 * k);
    } else {
        // The quotient overflows for prices below 1e-308.
        const double w2 =
            2.0 * (ratio < 1e300 ? std::log1p(ratio) : std::log(spread) - std::log(q));
        const double w = std::sqrt(w2);
        s = k *
            (1.0 + w * (0.00931027 + w * (0.05494495 + w * (0.00819867 + w * 0.00341292)))) /
            (w2 * (0.19939597 + w * (0.00280803 + w * (0.00874396 + w * 0.00340069))));
    }
    const double s2 = s * s;
    const double k2 = k * k;
    return s * (1.0 + s2 * (0.04247992 - 3.4632e-4 * k2 +
                            s2 * (0.002324477 - 8.0724e-5 * k2 + s2 * 9.8143e-4)));
}

// Large k (sign = -1) or large q (sign = +1): with rho = Y(z2)/Y(|z1|) either
// q = Phi(-z1) (1 - rho) or 1 - q = Phi(z1) (1 + rho). Two passes of "freeze rho, invert Phi",
// rho from the rough Mills ratio.
inline double guess_by_tail(double k, double log_tail, double sign) {
    double z = 0.0;
    for (int pass = 0; pass < 2; ++pass) {
        const double rho = mills_denominator(z) / mills_denominator(std::sqrt(z * z + 2.0 * k));
        const double log_p = log_tail - std::log1p(sign * rho);
        z = normal_quantile_guess(std::min(log_p, -0.6931471805599453));
    }
    const double root = std::sqrt(z * z + 2.0 * k);
    return sign > 0.0 ? root + z : 2.0 * k / (root + z);
}

// log of (model price / wanted price) and its derivative at s; upper: of the distances to the
// bound.
struct log_residual {
    double value;
    double slope;
};

inline log_residual residual(double k, double s, double tail, bool upper) {
    const double a = k > 0.0 ? k / s : 0.0;
    const double z1 = a - 0.5 * s;
    const double z2 = a + 0.5 * s;
    double exponent = 0.0;  // tail = exp(exponent) * bracket / sqrt(2 pi)
    double bracket = 0.0;
    double slope = 0.0;
    if (upper) {
        exponent = -0.5 * z1 * z1;
        bracket = mills_ratio_right(-z1) + mills_ratio_right(z2);
        slope = -1.0 / bracket;
    } else if (near_expiry(k, s)) {
        exponent = 0.5 * (k - a * a);
        bracket = s * near_expiry_bracket(a, s, k);
        const double h = 0.125 * s * s;  // exp(-h), only for the slope
        constexpr double e[] = {1.0,        -1.0,         1.0 / 2.0,   -1.0 / 6.0,
                                1.0 / 24.0, -1.0 / 120.0, 1.0 / 720.0, -1.0 / 5040.0};
        slope = polynomial(e, h) / bracket;
    } else {
        exponent = -0.5 * z1 * z1;
        bracket = mills_ratio_right(z1) - mills_ratio_right(z2);
        slope = 1.0 / bracket;
    }
    bracket *= inverse_sqrt_two_pi;
    // Far out the logarithm is taken apart: exp would underflow, and the conditioning, about
    // 1/(z1 z2), forgives the rounding of the large terms.
    const double value = exponent < -50.0 ? std::log(bracket) + exponent - std::log(tail)
                                          : std::log(std::exp(exponent) * bracket / tail);
    return {value, slope};
}

// The Householder step of fourth order for f with Newton step n = -f/f', and f''/f', f'''/f'.
inline double householder_step(double n, double second, double third) {
    return n * (1.0 + 0.5 * second * n) / (1.0 + n * (second + n * third * (1.0 / 6.0)));
}

}  // namespace detail

// s with q(k, s) = q, for k >= 0 and 0 < q < 1; gap = 1 - q, which the caller knows without
// cancellation. NaN if the iteration does not settle.
inline double total_volatility(double k, double q, double gap) {
    using namespace detail;
    if (k == 0.0 && q < 1e-9) return sqrt_two_pi * q;  // exact to s^2/24; slopes overflow here
    const bool small_k = k <= 3.0;
    bool upper = q > 0.5;
    if (!small_k && !upper)  // above the price at z1 = 0
        upper = q > 0.5 - 0.5 * mills_denominator(0.0) / mills_denominator(std::sqrt(2.0 * k));
    const double tail = upper ? gap : q;
    double s = small_k && !upper ? guess_small_k(k, q)
                                 : guess_by_tail(k, std::log(tail), upper ? 1.0 : -1.0);
    for (int i = 0; i < 16; ++i) {
        const auto f = residual(k, s, tail, upper);
        const double a = k > 0.0 ? k / s : 0.0;
        const double z2 = a + 0.5 * s;
        const double w = (a - 0.5 * s) * z2 / s;                 // q'' / q'
        const double dw = -3.0 * (a / s) * (a / s) - 0.25;       // its derivative
        const double second = w - f.slope;
        const double third = w * w + dw - f.slope * (3.0 * w - 2.0 * f.slope);
        const double step = std::clamp(householder_step(-f.value / f.slope, second, third),
                                       -0.5 * s, s);
        s += step;
        // The error left is of the order of the fourth power of this.
        if (std::abs(step) * (1.0 + z2) < 1e-4 * s) return s;
    }
    return std::nan("");
}

// Volatility of a price with forward, strike, maturity, discount > 0.
//
// A price below its intrinsic value by no more than its own rounding (two units in the last place)
// counts as intrinsic and has volatility zero.
inline implied_volatility_result black_implied_volatility(double price, double forward,
                                                          double strike, double maturity,
                                                          double discount, bool is_call) {
    constexpr double eps = 2.220446049250313e-16;
    const double nan = std::nan("");
    const double bound = std::min(forward, strike);
    const double value = price / discount;
    // Parity: an in-the-money price is worth |F - K| more than the other side.
    const bool in_the_money = is_call ? forward > strike : strike > forward;
    const double intrinsic = in_the_money ? std::abs(forward - strike) : 0.0;
    const double otm = value - intrinsic;
    if (otm <= 0.0 && -otm <= 2.0 * eps * value) return {0.0, inversion_status::solved};
    if (otm < 0.0) return {nan, inversion_status::below_intrinsic};
    const double gap = bound - otm;
    // The second test catches the bound itself where dividing by the discount rounded it down.
    if (!(gap > 0.0) || price >= discount * (is_call ? forward : strike))
        return {nan, inversion_status::above_bound};
    const double k = std::abs(log_moneyness(forward, strike));
    const double s = total_volatility(k, otm / bound, gap / bound);
    if (!(s == s)) return {nan, inversion_status::not_converged};
    return {s / std::sqrt(maturity), inversion_status::solved};
}

}  // namespace volterra

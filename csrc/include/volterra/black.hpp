// The Black formula, out of the money and without cancellation.
//
// An option out of the money by k = |log(F/K)| with total volatility s = sigma sqrt(T) is worth
// discount * min(F, K) * q(k, s) with
//
//   q = Phi(-z1) - e^k Phi(-z2),   z1 = k/s - s/2,   z2 = k/s + s/2,   dq/ds = phi(z1).
//
// As phi(z1) = e^k phi(z2), both terms share one density and the rest is a difference of Mills
// ratios, q = phi(z1) [Y(z1) - Y(z2)]: the price is its own vega times a slowly varying function.
// The formula is that of "The pricing of commodity contracts", J. Financ. Econ. 3, 1976,
// doi:10.1016/0304-405X(76)90024-6; the rearrangements are derived where they stand.
#pragma once

#include <algorithm>
#include <cmath>

#include "volterra/normal.hpp"

namespace volterra {

// log(F/K) to a relative error of one or two units in the last place, also near the money:
// F - K is exact when F and K are within a factor of two.
inline double log_moneyness(double forward, double strike) {
    const double difference = forward - strike;
    if (std::abs(difference) < 0.5 * strike) return std::log1p(difference / strike);
    const double ratio = forward / strike;
    if (ratio > 1e-300 && ratio < 1e300) return std::log(ratio);
    return std::log(forward) - std::log(strike);
}

namespace detail {

// Where the difference of Mills ratios cancels (small s) the bracket is expanded instead.
inline bool near_expiry(double k, double s) { return k <= 3.0 && s <= 1.0; }

// The bracket S of q = s phi(0) exp(k/2 - (k/s)^2/2) S in the region above.
//
// With a = k/s, t = s/2, y = a t = k/2 the equation Y' = zY - 1 gives
//   Y(a-t) - Y(a+t) = 2t e^(t^2/2) [ (sinh y / y) M(a) - g ],
//   g = int_0^1 cosh(y(1-v)) (1 - e^(-t^2 v^2/2)) dv = h (c_1 - h/2 (c_2 - h/3 (c_3 - ...))),
// h = t^2/2, c_n = int_0^1 cosh(y(1-v)) v^(2n) dv. By parts,
// c_n = 1/(2n+1) + y^2 c_{n+1} / ((2n+1)(2n+2)), run downwards; c_0 = sinh y / y comes last, free.
// g is at most 0.37 of the first term (k <= 3), so little cancels. Ten terms leave 1e-18 at s = 1.
inline double near_expiry_bracket(double a, double s, double k) {
    constexpr int terms = 10;
    const double y2 = 0.25 * k * k;
    const double h = 0.125 * s * s;
    double c = 1.0 / (2 * terms + 3);
    double sum = 0.0;
    for (int n = terms; n >= 1; --n) {
        c = 1.0 / (2 * n + 1) + y2 * c * (1.0 / ((2 * n + 1) * (2 * n + 2)));
        sum = c - h * (1.0 / (n + 1)) * sum;
    }
    return (1.0 + 0.5 * y2 * c) * mills_slope(a) - h * sum;
}

}  // namespace detail

// q(k, s) for k >= 0, s >= 0: the out-of-the-money price per unit of discount * min(F, K), in
// [0, 1]. Relative error within a few units in the last place of what the rounding of k and s
// alone does to it, 1 + s |dq/ds| / q.
inline double out_of_the_money_price(double k, double s) {
    const double a = k > 0.0 ? k / s : 0.0;
    const double z1 = a - 0.5 * s;
    const double z2 = a + 0.5 * s;
    if (!(z1 < 39.0)) return 0.0;  // below the smallest positive number
    if (z1 < -39.0) return 1.0;
    if (detail::near_expiry(k, s))
        return s * inverse_sqrt_two_pi * std::exp(0.5 * (k - a * a)) *
               detail::near_expiry_bracket(a, s, k);
    if (z1 > -0.5)
        return normal_density(z1) * (mills_ratio_right(z1) - mills_ratio_right(z2));
    return 1.0 - normal_density(z1) * (mills_ratio_right(-z1) + mills_ratio_right(z2));
}

// dq/ds = phi(z1).
inline double out_of_the_money_vega(double k, double s) {
    const double a = k > 0.0 ? k / s : 0.0;
    return normal_density(a - 0.5 * s);
}

// b(x, s) = e^(x/2) Phi(x/s + s/2) - e^(-x/2) Phi(x/s - s/2): the undiscounted call per unit of
// sqrt(F K), x = log(F/K).
inline double normalised_black(double x, double s) {
    const double k = std::abs(x);
    const double otm = out_of_the_money_price(k, s) * std::exp(-0.5 * k);
    return x > 0.0 ? 2.0 * std::sinh(0.5 * x) + otm : otm;
}

// db/ds.
inline double normalised_black_vega(double x, double s) {
    const double k = std::abs(x);
    return out_of_the_money_vega(k, s) * std::exp(-0.5 * k);
}

// The contract: forward, strike, discount > 0, maturity and volatility >= 0.
inline double black_price(double forward, double strike, double maturity, double volatility,
                          double discount, bool is_call) {
    const double k = std::abs(log_moneyness(forward, strike));
    const double q = out_of_the_money_price(k, volatility * std::sqrt(maturity));
    const double intrinsic = std::max(is_call ? forward - strike : strike - forward, 0.0);
    return discount * (intrinsic + std::min(forward, strike) * q);
}

// Per unit of volatility (1.00 = 100 %), the same for call and put.
inline double black_vega(double forward, double strike, double maturity, double volatility,
                         double discount) {
    const double root = std::sqrt(maturity);
    const double k = std::abs(log_moneyness(forward, strike));
    const double density = out_of_the_money_vega(k, volatility * root);
    return discount * std::min(forward, strike) * root * density;
}

}  // namespace volterra

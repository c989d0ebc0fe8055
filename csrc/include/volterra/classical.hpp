// Closed form of the classical model (hurst = 1/2): psi(t) and its integral.
//
// With b = -c1, d = sqrt(b^2 - 4 c0 c2), Re d >= 0, e = exp(-d t), s = (1 - e)/d and
// D = ((1 + e) + b s)/2:   psi = c0 s / D,   int psi = 2 c0 t/(b + d) - log(D)/c2.
// The exponential decays, so the principal logarithm stays on the right branch; nothing cancels as
// vol_of_vol -> 0 or u -> 0, -i. Source: A closed-form solution for options with stochastic
// volatility, Rev. Financ. Stud. 6, 1993 (from memory), in the branch-safe arrangement.
#pragma once

#include <cmath>
#include <complex>

#include "volterra/model.hpp"

namespace volterra {

namespace detail {

// (1 - exp(-z)) for complex z without cancellation near 0.
inline std::complex<double> one_minus_exp(std::complex<double> z) {
    const double a = -z.real(), b = -z.imag();
    const double half = std::sin(0.5 * b);
    return {-(std::expm1(a) * std::cos(b) - 2.0 * half * half), -std::exp(a) * std::sin(b)};
}

// log(1 + z)/z for complex z, 1 at z = 0.
inline std::complex<double> log1p_ratio(std::complex<double> z) {
    const double size = std::abs(z);
    if (size < 1e-3) {
        std::complex<double> sum = 0.0, power = 1.0;
        for (int k = 1; k <= 7; ++k, power *= -z) sum += power / static_cast<double>(k);
        return sum;
    }
    const double x = z.real(), y = z.imag();
    const std::complex<double> log1p = {0.5 * std::log1p(x * (2.0 + x) + y * y),
                                        std::atan2(y, 1.0 + x)};
    return log1p / z;
}

}  // namespace detail

struct classical_solution {
    std::complex<double> psi, integral;
};

inline classical_solution solve_classical(const riccati_coefficients& c, double t) {
    using complex = std::complex<double>;
    if (c.c0 == 0.0 || t == 0.0) return {0.0, 0.0};
    const complex b = -c.c1;
    complex d = std::sqrt(b * b - 4.0 * c.c0 * c.c2);
    if (d == 0.0) d = 1e-150;  // double root: s -> t, and the formulas are continuous there
    const complex e1 = detail::one_minus_exp(d * t);
    const complex s = e1 / d;
    const complex D = 0.5 * ((2.0 - e1) + b * s);
    const complex psi = c.c0 * s / D;
    // D - 1 = (b - d) s / 2 = 2 c0 c2 s / (b + d); when b is near -d take the form with d -> -d.
    const complex plus = b + d, minus = b - d;
    if (std::abs(plus) >= 1e-2 * std::abs(d)) {
        const complex rate = 2.0 * c.c0 / plus;
        return {psi, rate * (t - s * detail::log1p_ratio(c.c2 * rate * s))};
    }
    const complex growing = -detail::one_minus_exp(-d * t) / d;  // (exp(dt) - 1)/d
    const complex rate = 2.0 * c.c0 / minus;
    return {psi, rate * (t - growing * detail::log1p_ratio(c.c2 * rate * growing))};
}

// Values of the basis functionals (model.hpp) of log E[exp(iuX_T)] at one u.
inline void classical_basis(const model_parameters& m, const variance_curve& curve,
                            std::complex<double> u, double maturity, std::complex<double>* basis) {
    const auto c = riccati(m, u);
    const bool driven = curve.form == curve_form::driven;
    for (std::size_t k = 0; k < curve.basis_size(); ++k) basis[k] = 0.0;
    if (driven) basis[0] = solve_classical(c, maturity).psi;  // int F = psi when K = 1
    for_each_reversed_piece(curve, maturity, [&](std::size_t k, double from, double to) {
        const auto a = solve_classical(c, from), b = solve_classical(c, to);
        if (driven)
            basis[k + 1] = b.integral - a.integral;
        else
            basis[k] = (b.psi - a.psi) + m.mean_reversion * (b.integral - a.integral);
    });
}

}  // namespace volterra

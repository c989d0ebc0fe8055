// Closed form of the classical model (hurst = 1/2): psi(t) and its integral.
//
// With b = -c1, d = sqrt(b^2 - 4 c0 c2), Re d >= 0, e = exp(-d t), s = (1 - e)/d and
// D = ((1 + e) + b s)/2:   psi = c0 s / D,   int psi = 2 c0 t/(b + d) - log(D)/c2.
// The exponential decays, so the principal logarithm stays on the right branch; nothing cancels as
// vol_of_vol -> 0 or u -> 0, -i. Source: A closed-form solution for options with stochastic
// volatility, Rev. Financ. Stud. 6, 1993 (from memory), in the branch-safe arrangement.
#pragma once

#include <algorithm>
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

inline std::complex<double> classical_psi(std::complex<double> c0, std::complex<double> b,
                                          std::complex<double> d, double t) {
    const auto e1 = detail::one_minus_exp(d * t);
    const auto s = d == 0.0 ? t : e1 / d;
    return c0 * s / (0.5 * ((2.0 - e1) + b * s));
}

inline classical_solution solve_classical(const riccati_coefficients& c, double t) {
    using complex = std::complex<double>;
    if (c.c0 == 0.0 || t == 0.0) return {0.0, 0.0};
    const complex b = -c.c1;
    const complex d = std::sqrt(b * b - 4.0 * c.c0 * c.c2);
    const complex psi = classical_psi(c.c0, b, d, t);
    // Early on the two terms of the integral cancel; psi is smooth there (no singularity within
    // three half-widths of [0, t]) and Gauss's rule of 16 points is exact to rounding.
    if (std::max(std::abs(b), std::abs(d)) * t < 1.0) {
        static constexpr double x[] = {
            0.0950125098376374, 0.2816035507792589, 0.4580167776572274, 0.6178762444026438,
            0.7554044083550030, 0.8656312023878318, 0.9445750230732326, 0.9894009349916499};
        static constexpr double w[] = {
            0.1894506104550685, 0.1826034150449236, 0.1691565193950025, 0.1495959888165767,
            0.1246289712555339, 0.0951585116824928, 0.0622535239386479, 0.0271524594117541};
        complex sum = 0.0;
        for (int i = 0; i < 8; ++i)
            sum += w[i] * (classical_psi(c.c0, b, d, 0.5 * t * (1.0 - x[i])) +
                           classical_psi(c.c0, b, d, 0.5 * t * (1.0 + x[i])));
        return {psi, 0.5 * t * sum};
    }
    const complex s = detail::one_minus_exp(d * t) / d;
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

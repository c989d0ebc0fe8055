// When does E[exp(p X_T)] explode? |E exp(iuX_T)| <= E exp(-Im(u) X_T), so a Fourier argument is
// admissible exactly when its moment p = -Im u is finite.
//
// Sources: Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007 (closed form
// at hurst = 1/2); Moment explosions in the rough Heston model, arXiv 1801.09458 (the rough model
// explodes in finite time exactly when the classical one does).
#pragma once

#include <cmath>
#include <limits>

#include "volterra/fractional_weights.hpp"
#include "volterra/model.hpp"

namespace volterra {

// Explosion time of the moment p in the classical model (hurst = 1/2) with the same coefficients.
inline double classical_explosion_time(const model_parameters& m, double p) {
    constexpr double never = std::numeric_limits<double>::infinity();
    if (p >= 0.0 && p <= 1.0) return never;
    const double c0 = 0.5 * p * (p - 1.0);
    const double b = m.mean_reversion - p * m.correlation * m.vol_of_vol;
    const double c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    if (c2 == 0.0) return never;
    const double discriminant = b * b - 4.0 * c0 * c2;
    if (discriminant >= 0.0) {
        if (b >= 0.0) return never;
        const double root = std::sqrt(discriminant);
        return root > 0.0 ? std::log((-b + root) / (-b - root)) / root : -2.0 / b;
    }
    const double root = std::sqrt(-discriminant);
    return 2.0 / root * (0.5 * std::acos(-1.0) + std::atan(b / root));
}

// Whether the moment p is infinite at `maturity`. Exact at hurst = 1/2; for the rough kernel the
// real equation is stepped by the implicit scheme of adams.hpp, whose corrector loses its real
// root at the explosion: with 512 steps the explosion time is located to about half a percent.
inline bool moment_explodes(const model_parameters& m, double p, double maturity) {
    const double classical = classical_explosion_time(m, p);
    if (std::isinf(classical)) return false;
    if (m.hurst == 0.5) return maturity >= classical;
    constexpr std::size_t steps = 512;
    const auto w = fractional_weights(m.alpha(), maturity / steps, steps);
    const double c0 = 0.5 * p * (p - 1.0);
    const double c1 = p * m.correlation * m.vol_of_vol - m.mean_reversion;
    const double c2 = 0.5 * m.vol_of_vol * m.vol_of_vol;
    std::vector<double> f(steps + 1);
    f[0] = c0;
    for (std::size_t n = 1; n <= steps; ++n) {
        double history = w.first[n] * f[0];
        for (std::size_t j = 1; j < n; ++j) history += w.lag[n - j] * f[j];
        const double q = 1.0 - w.diagonal * c1, e = history + w.diagonal * c0;
        const double discriminant = q * q - 4.0 * w.diagonal * c2 * e;
        if (!(discriminant >= 0.0) || q <= 0.0) return true;
        const double psi = 2.0 * e / (q + std::sqrt(discriminant));
        f[n] = c0 + (c1 + c2 * psi) * psi;
    }
    return false;
}

// The finite moment nearest to the end of the strip, searched from an exploding moment inwards.
inline double critical_moment(const model_parameters& m, double exploding, double maturity) {
    double outside = exploding, inside = exploding > 1.0 ? 1.0 : 0.0;
    for (int i = 0; i < 40 && std::abs(outside - inside) > 1e-3 * std::abs(outside); ++i) {
        const double middle = 0.5 * (outside + inside);
        (moment_explodes(m, middle, maturity) ? outside : inside) = middle;
    }
    return inside;
}

inline void require_finite_moment(const model_parameters& m, double p, double maturity) {
    if (!moment_explodes(m, p, maturity)) return;
    char text[256];
    std::snprintf(text, sizeof text,
                  "u with imaginary part %.6g lies outside the strip at maturity %.6g: the moment "
                  "E[exp(p X)] of order p = %.6g is infinite there (critical moment about %.4g)",
                  -p, maturity, p, critical_moment(m, p, maturity));
    throw moment_explosion_error(text);
}

}  // namespace volterra

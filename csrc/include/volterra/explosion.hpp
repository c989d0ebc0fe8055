// When does E[exp(p X_T)] explode? |E exp(iuX_T)| <= E exp(-Im(u) X_T), so a Fourier argument is
// admissible exactly when its moment p = -Im u is finite.
//
// The moment is finite until the real Riccati–Volterra solution psi = K * [c0 + c1 psi + c2 psi^2]
// explodes, c0 = p (p-1)/2, c1 = p rho nu - lambda, c2 = nu^2/2: the time depends on p and the
// parameters, not on the variance curve.
//
// Sources: Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007 (closed form
// at hurst = 1/2); Moment explosions in the rough Heston model, arXiv 1801.09458 (the rough model
// explodes in finite time exactly when the classical one does).
#pragma once

#include <algorithm>
#include <cmath>
#include <cstdio>
#include <limits>
#include <span>

#include "volterra/blow_up.hpp"
#include "volterra/model.hpp"

namespace volterra {

namespace detail {

// The equation in its own unit of time, D^alpha y = a + b y + y^2 with max(a, |b|) = 1.
struct moment_riccati {
    double rate;  // (unit of time)^-alpha
    double a, b;
    double discriminant;  // b^2 - 4a

    bool explodes() const { return discriminant < 0.0 || b > 0.0; }
};

inline moment_riccati scale_moment(const model_parameters& m, double p) {
    const double nu = m.vol_of_vol, rho = m.correlation, lambda = m.mean_reversion;
    const double root = 0.5 * nu * std::sqrt(std::abs(p)) * std::sqrt(std::abs(p - 1.0));
    const double c1 = p * rho * nu - lambda;
    const double rate = std::max(root, std::abs(c1));
    // c1^2 - 4 c0 c2 with the squares of p collected: they cancel at |rho| = 1.
    const double q = p * nu / rate, l = lambda / rate;
    const double discriminant =
        l * l + q * (nu / rate - 2.0 * rho * l) - q * q * (1.0 - rho) * (1.0 + rho);
    return {rate, (root / rate) * (root / rate), c1 / rate, discriminant};
}

// Never later than the explosion, in units of time: psi climbs to y no sooner than the largest
// right-hand side on the way lets it, t^alpha max f / Gamma(1 + alpha) >= y, for the best y.
inline double explosion_time_bound(const moment_riccati& e, double alpha) {
    const double root = std::sqrt(e.a);
    const double height = root < -e.b ? -e.b / e.a : 1.0 / (e.b + 2.0 * root);
    return std::pow(std::tgamma(1.0 + alpha) * height, 1.0 / alpha);
}

inline double classical_blow_up_time(const moment_riccati& e) {
    if (e.discriminant >= 0.0) {
        const double root = std::sqrt(e.discriminant), sum = e.b + root;
        // log((b + root)/(b - root))/root
        return root > 0.1 ? std::log(sum * sum / (4.0 * e.a)) / root
               : root > 0.0 ? 2.0 * std::atanh(root / e.b) / root : 2.0 / e.b;
    }
    const double root = std::sqrt(-e.discriminant);
    return 2.0 * std::atan2(root, e.b) / root;
}

}  // namespace detail

// First time at which E[exp(p X)] is infinite; infinity if there is none up to `horizon`.
inline double explosion_time(const model_parameters& m, double p,
                             double horizon = std::numeric_limits<double>::infinity()) {
    constexpr double never = std::numeric_limits<double>::infinity();
    if ((p >= 0.0 && p <= 1.0) || m.vol_of_vol == 0.0) return never;
    const auto e = detail::scale_moment(m, p);
    if (!std::isfinite(e.rate)) return 0.0;
    if (!e.explodes()) return never;
    const double alpha = m.alpha(), unit = std::pow(e.rate, -1.0 / alpha);
    if (m.hurst == 0.5) {
        const double time = unit * detail::classical_blow_up_time(e);
        return time > horizon ? never : time;
    }
    if (detail::explosion_time_bound(e, alpha) * unit > horizon) return never;
    return unit * blow_up_time({alpha, e.a, e.b, -0.25 * e.discriminant}, horizon / unit);
}

// Whether the moment p is infinite at `maturity`.
inline bool moment_explodes(const model_parameters& m, double p, double maturity) {
    return explosion_time(m, p, maturity) <= maturity;
}

// At correlation 1 the stochastic integral in X is I^(1-alpha) of the variance, and -p X, p > 0, is
// bounded above while t^-alpha / Gamma(1 - alpha) >= nu/2 - lambda: no lower moment explodes until
// this time. It is 0 in the classical model.
inline double bounded_loss_time(const model_parameters& m) {
    const double excess = 0.5 * m.vol_of_vol - m.mean_reversion;
    if (excess <= 0.0) return std::numeric_limits<double>::infinity();
    if (m.hurst == 0.5) return 0.0;
    return std::pow(std::tgamma(0.5 - m.hurst) * excess, -1.0 / m.alpha());
}

// Root of an increasing function between two ends of opposite sign, to 1e-10 relative: the secant
// through both ends, the value of an end kept twice halved (Illinois), and bisections in between,
// which also serve while the lower end is on the plateau at -1. Returns the lower end.
template <class Function>
double increasing_root(Function&& f, double low, double high, double at_low, double at_high,
                       double tolerance) {
    int side = 0;
    for (int i = 0; i < 200 && high - low > std::max(1e-10 * high, tolerance); ++i) {
        const bool bisect = i % 8 == 7 || at_low == -1.0;
        double x = bisect ? 0.5 * (low + high) : high - at_high * (high - low) / (at_high - at_low);
        const double gap = 2e-11 * high;  // never so near an end that the other cannot follow
        x = std::clamp(x, low + gap, high - gap);
        const double y = f(x);
        if (y < 0.0) {
            if (side < 0) at_high *= 0.5;
            low = x, at_low = y, side = -1;
        } else {
            if (side > 0) at_low *= 0.5;
            high = x, at_high = y, side = 1;
        }
    }
    return low;
}

// The end of the strip of finite moments above (sign > 0) or below it, infinite if there is none.
// Relative error below 1e-8; 10 to 30 explosion times.
inline double critical_moment(const model_parameters& m, double sign, double maturity) {
    constexpr double never = std::numeric_limits<double>::infinity();
    if (m.vol_of_vol == 0.0 || (sign > 0.0 && m.correlation == -1.0) ||
        (sign < 0.0 && m.correlation == 1.0 && maturity <= bounded_loss_time(m)))
        return sign * never;
    const double origin = sign > 0.0 ? 1.0 : 0.0;
    // Of the distance from [0, 1]: -1 where the moment never explodes, 0 at the end of the strip.
    const auto excess = [&](double distance) {
        const double time = explosion_time(m, origin + sign * distance, 1e3 * maturity);
        return std::isinf(time) ? -1.0 : std::pow(maturity / time, m.alpha()) - 1.0;
    };
    double inside = 0.0, outside = 1.0, at_inside = -1.0, at_outside = excess(outside);
    while (at_outside < 0.0) {
        if (outside > 1e300) return sign * never;
        inside = outside;
        at_inside = at_outside;
        outside *= 8.0;
        at_outside = excess(outside);
    }
    return origin + sign * increasing_root(excess, inside, outside, at_inside, at_outside,
                                           2e-16 * origin);
}

// Throws moment_explosion_error if the moment p is infinite at one of the maturities. Cost: nothing
// for p in [0, 1], 0.1 microseconds where the bound decides, else one explosion time.
inline void require_finite_moment(const model_parameters& m, double p,
                                  std::span<const double> maturities) {
    if ((p >= 0.0 && p <= 1.0) || maturities.empty()) return;
    const double longest = *std::max_element(maturities.begin(), maturities.end());
    const double time = explosion_time(m, p, longest);
    const auto beyond = std::find_if(maturities.begin(), maturities.end(),
                                     [&](double maturity) { return maturity >= time; });
    if (beyond == maturities.end()) return;
    char text[256];
    std::snprintf(text, sizeof text,
                  "u with imaginary part %.6g lies outside the strip at maturity %.6g: the moment "
                  "E[exp(p X)] of order p = %.6g is infinite there (critical moment %.6g)",
                  -p, *beyond, p, critical_moment(m, p, *beyond));
    throw moment_explosion_error(text);
}

}  // namespace volterra

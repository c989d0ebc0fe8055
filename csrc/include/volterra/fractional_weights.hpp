// Product-trapezoid (Adams–Moulton) weights of the fractional kernel t^(a-1)/Gamma(a) on a uniform
// mesh: (K * f)(t_n) = w_0(n) f_0 + sum_{0<j<n} w(n-j) f_j + w_diagonal f_n for piecewise-linear f.
//
// Formula: Detailed error analysis for a fractional Adams method, Numer. Algorithms 36, 2004.
// The weights are first and second differences of powers; taken literally they lose 2 log10(n)
// digits. Here the leading terms are cancelled by hand through the binomial series, and every
// weight is good to a few ulp.
#pragma once

#include <cmath>
#include <cstddef>
#include <vector>

namespace volterra {

struct uniform_weights {
    double diagonal = 0.0;
    std::vector<double> lag;    // lag[m], m = 1 .. steps - 1 (lag[0] unused)
    std::vector<double> first;  // first[n], weight of f_0 at step n = 1 .. steps
};

namespace detail {

// (1+x)^p + (1-x)^p - 2 for 0 < x <= 1/4, by the even binomial series.
inline double central_power_difference(double p, double x) {
    double binomial = 1.0, sum = 0.0, power = 1.0;
    for (int k = 1; k <= 60; ++k) {
        binomial *= (p - k + 1) / k;
        power *= x;
        if (k % 2) continue;
        const double term = 2.0 * binomial * power;
        sum += term;
        if (std::abs(term) <= 1e-18 * std::abs(sum)) break;
    }
    return sum;
}

// (1-x)^p - (1 - p x) for 0 < x <= 1/4, by the binomial series from the quadratic term on.
inline double power_remainder(double p, double x) {
    double binomial = p, sum = 0.0, power = -x;
    for (int k = 2; k <= 60; ++k) {
        binomial *= (p - k + 1) / k;
        power *= -x;
        const double term = binomial * power;
        sum += term;
        if (std::abs(term) <= 1e-18 * std::abs(sum)) break;
    }
    return sum;
}

}  // namespace detail

inline uniform_weights fractional_weights(double alpha, double step, std::size_t steps) {
    constexpr std::size_t series_from = 4;
    const double p = alpha + 1.0;
    const double scale = std::pow(step, alpha) / std::tgamma(alpha + 2.0);
    uniform_weights w;
    w.diagonal = scale;
    w.lag.resize(steps);
    w.first.resize(steps + 1);
    for (std::size_t m = 1; m < steps; ++m) {
        const double x = static_cast<double>(m);
        const double difference =
            m < series_from ? std::pow(x + 1, p) - 2 * std::pow(x, p) + std::pow(x - 1, p)
                            : std::pow(x, p) * detail::central_power_difference(p, 1 / x);
        w.lag[m] = scale * difference;
    }
    for (std::size_t n = 1; n <= steps; ++n) {
        const double x = static_cast<double>(n);
        const double difference =
            n < series_from ? std::pow(x - 1, p) - (x - 1 - alpha) * std::pow(x, alpha)
                            : std::pow(x, p) * detail::power_remainder(p, 1 / x);
        w.first[n] = scale * difference;
    }
    return w;
}

}  // namespace volterra

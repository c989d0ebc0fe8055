// Product-trapezoid (Adams–Moulton) weights of the fractional kernel t^(a-1)/Gamma(a) on a uniform
// mesh: (K * f)(t_n) = w_0(n) f_0 + sum_{0<j<n} w(n-j) f_j + w_diagonal f_n for piecewise-linear f.
//
// Formula: Detailed error analysis for a fractional Adams method, Numer. Algorithms 36, 2004.
// The weights are first and second differences of powers; taken literally they lose 2 log10(n)
// digits. Here the leading terms are cancelled by hand through the binomial series, and every
// weight is good to a few ulp.
#pragma once

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <vector>

namespace volterra {

struct uniform_weights {
    double diagonal = 0.0;
    std::vector<double> lag;    // lag[m], m = 1 .. steps - 1 (lag[0] unused)
    std::vector<double> first;  // first[n], weight of f_0 at step n = 1 .. steps
};

inline uniform_weights fractional_weights(double alpha, double step, std::size_t steps) {
    // From this index on the series in 1/x^2 and 1/x replace the differences; 26 terms give
    // 4^-26 < 1e-15 at x = 4, and fewer are needed further out.
    constexpr std::size_t series_from = 4, terms = 26;
    const double p = alpha + 1.0;
    const double scale = std::pow(step, alpha) / std::tgamma(alpha + 2.0);
    double binomial[terms + 1] = {1.0};
    for (std::size_t k = 1; k <= terms; ++k) {
        const double order = static_cast<double>(k);
        binomial[k] = binomial[k - 1] * (p - order + 1.0) / order;
    }
    // 4^26 = 2^52: the number of terms that matter at x.
    auto needed = [=](double x) {
        return std::min(terms, static_cast<std::size_t>(36.8 / std::log(x)) + 1);
    };
    uniform_weights w;
    w.diagonal = scale;
    w.lag.resize(steps);
    w.first.resize(steps + 1);
    double power = 0.0;  // x^p
    for (std::size_t n = 1; n <= steps; ++n) {
        const double x = static_cast<double>(n);
        power = std::pow(x, p);
        double first, lag;
        if (n < series_from) {
            first = std::pow(x - 1, p) - (x - 1 - alpha) * std::pow(x, alpha);
            lag = std::pow(x + 1, p) - 2 * power + std::pow(x - 1, p);
        } else {
            // (1-y)^p - (1 - p y) and (1+y)^p + (1-y)^p - 2 with y = 1/x, by Horner's rule
            const double y = 1.0 / x;
            const std::size_t most = needed(x);
            double odd = 0.0, even = 0.0;
            for (std::size_t k = (most | 1); k >= 3; k -= 2) {
                odd = odd * y * y + (k <= terms ? binomial[k] : 0.0);
                even = even * y * y + (k - 1 <= terms ? binomial[k - 1] : 0.0);
            }
            first = power * y * y * (even - y * odd);
            lag = 2.0 * power * y * y * even;
        }
        w.first[n] = scale * first;
        if (n < steps) w.lag[n] = scale * lag;
    }
    return w;
}

}  // namespace volterra

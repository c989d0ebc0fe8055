// log E[exp(iuX_T)] for many u and maturities with an error estimate, by the scheme asked for.
#pragma once

#include <cmath>
#include <complex>
#include <cstddef>
#include <limits>
#include <map>
#include <span>
#include <stdexcept>
#include <vector>

#include "volterra/adams_transform.hpp"
#include "volterra/classical.hpp"
#include "volterra/explosion.hpp"
#include "volterra/model.hpp"

namespace volterra {

enum class scheme { automatic, adams };

struct transform_options {
    scheme method = scheme::automatic;
    std::size_t steps = 0;     // adams: exactly this many steps to each maturity; 0: by tolerance
    double tolerance = 1e-8;   // bound on |error of phi(u)| / phi(i Im u)
};

struct transform_result {
    std::vector<std::complex<double>> values;  // maturities x u
    std::vector<double> errors;                // absolute error of phi, same shape
    double worst_ratio = 0.0;  // largest error / (tolerance phi(i Im u)); above 1: tolerance missed
};

namespace detail {

// Rounding: log phi is a sum of terms of size |c0| xi T, each with a relative error of some ulp.
inline double rounding_error(const model_parameters& m, std::complex<double> u,
                             std::complex<double> log_phi, double total_variance) {
    constexpr double ulp = std::numeric_limits<double>::epsilon();
    const double size = std::abs(riccati(m, u).c0) * total_variance + std::abs(log_phi);
    return 4.0 * ulp * size * std::exp(log_phi.real());
}

}  // namespace detail

inline transform_result log_transform(const target_kernels& kernels, const model_parameters& m,
                                      const variance_curve& curve,
                                      std::span<const std::complex<double>> u,
                                      std::span<const double> maturities,
                                      const transform_options& options) {
    using complex = std::complex<double>;
    const std::size_t n = u.size();
    transform_result result;
    result.values.resize(maturities.size() * n);
    result.errors.assign(maturities.size() * n, 0.0);
    const bool closed_form = options.method == scheme::automatic && m.hurst == 0.5;

    std::map<double, double> moments;  // Im u -> phi(i Im u), the scale of the tolerance
    for (const auto& z : u) moments[z.imag()] = 1.0;

    std::vector<complex> basis(curve.basis_size());
    auto classical = [&](complex z, double maturity) {
        classical_basis(m, curve, z, maturity, basis.data());
        complex sum = 0.0;
        const bool driven = curve.form == curve_form::driven;
        if (driven) sum += curve.initial * basis[0];
        for (std::size_t k = 0; k < curve.levels.size(); ++k)
            sum += curve.levels[k] * basis[k + driven];
        return sum;
    };

    // A value good to a few digits, for scales.
    auto estimate = [&](complex z, double maturity) {
        if (closed_form) return classical(z, maturity);
        complex value;
        solve_adams(kernels, m, {&z, 1}, maturity, adams_first_steps,
                    uniform_functional(curve, m.mean_reversion, maturity, adams_first_steps, false),
                    {&value, 1});
        return value;
    };

    for (std::size_t t = 0; t < maturities.size(); ++t) {
        const double maturity = maturities[t];
        const std::span<complex> values(result.values.data() + t * n, n);
        const std::span<double> errors(result.errors.data() + t * n, n);
        for (auto& [y, scale] : moments) {
            require_finite_moment(m, -y, maturity);
            if (y != 0.0 && y != -1.0)  // E[1] = E[exp X] = 1
                scale = std::exp(estimate({0.0, y}, maturity).real());
        }
        std::vector<double> bounds(n);
        for (std::size_t i = 0; i < n; ++i) bounds[i] = options.tolerance * moments[u[i].imag()];
        if (closed_form)
            for (std::size_t i = 0; i < n; ++i) values[i] = classical(u[i], maturity);
        else if (options.steps)
            adams_with_error(kernels, m, curve, u, maturity, options.steps, values, errors);
        else
            adams_to_tolerance(kernels, m, curve, u, maturity, bounds, values, errors);

        // -8 log phi(-i/2) is the total variance of the Black model with the same value there.
        const double variance = -8.0 * estimate({0.0, -0.5}, maturity).real();
        for (std::size_t i = 0; i < n; ++i) {
            errors[i] += detail::rounding_error(m, u[i], values[i], variance);
            result.worst_ratio = std::max(result.worst_ratio, errors[i] / bounds[i]);
        }
    }
    return result;
}

}  // namespace volterra

// Out-of-the-money prices of a model for many (strike, maturity) pairs.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <map>
#include <span>
#include <vector>

#include "volterra/fourier.hpp"
#include "volterra/transform.hpp"

namespace volterra {

// Total variance of the Black model that agrees with the transform at u = -i/2: of the size of the
// integrated forward variance, available whatever the form of the curve.
inline double effective_variance(const target_kernels& kernels, const model_parameters& m,
                                 const variance_curve& curve, double maturity) {
    const std::complex<double> centre(0.0, -0.5);
    const auto result = log_transform(kernels, m, curve, {&centre, 1}, {&maturity, 1},
                                      {scheme::automatic, 0, 1e-3});
    return -8.0 * result.values[0].real();
}

// prices[i]: per unit of forward, of the call when moneyness[i] = K/F >= 1 and of the put below.
// Returns the largest estimate of the absolute error.
inline double out_of_the_money_prices(const target_kernels& kernels, const model_parameters& m,
                                      const variance_curve& curve,
                                      std::span<const double> moneyness,
                                      std::span<const double> maturities, double tolerance,
                                      std::span<double> prices) {
    std::map<double, std::vector<std::size_t>> slices;
    for (std::size_t i = 0; i < maturities.size(); ++i) slices[maturities[i]].push_back(i);
    double worst = 0.0;
    for (const auto& [maturity, members] : slices) {
        const double variance = effective_variance(kernels, m, curve, maturity);
        if (!(variance > 0.0)) {
            for (const auto i : members) prices[i] = 0.0;
            continue;
        }
        std::vector<double> k(members.size());
        for (std::size_t j = 0; j < k.size(); ++j) k[j] = std::log(moneyness[members[j]]);
        auto evaluate = [&](std::span<const std::complex<double>> u,
                            std::span<std::complex<double>> values, std::span<double> errors) {
            const auto result = log_transform(kernels, m, curve, u, {&maturity, 1},
                                              {scheme::automatic, 0, 0.3 * tolerance});
            std::copy(result.values.begin(), result.values.end(), values.begin());
            std::copy(result.errors.begin(), result.errors.end(), errors.begin());
        };
        const auto slice = price_slice(evaluate, k, variance, tolerance);
        for (std::size_t j = 0; j < k.size(); ++j)
            prices[members[j]] = std::max(slice.values[j], 0.0);
        worst = std::max(worst, slice.error);
    }
    return worst;
}

}  // namespace volterra

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
                                      {.tolerance = 1e-3, .interpolate = false});
    return -8.0 * result.values[0].real();
}

// The line of one maturity that serves log-moneyness up to `reach` standard deviations.
inline priced_line line_of(const target_kernels& kernels, const model_parameters& m,
                           const variance_curve& curve, double maturity, double total_variance,
                           double reach, double tolerance) {
    auto evaluate = [&](std::span<const std::complex<double>> u,
                        std::span<std::complex<double>> values, std::span<double> errors) {
        const auto result = log_transform(kernels, m, curve, u, {&maturity, 1},
                                          {.tolerance = 0.3 * tolerance, .interpolate = false});
        std::copy(result.values.begin(), result.values.end(), values.begin());
        std::copy(result.errors.begin(), result.errors.end(), errors.begin());
    };
    return choose_line(evaluate, total_variance, reach * std::sqrt(total_variance), tolerance);
}

// First reach of a line, in standard deviations; it doubles for strikes further out.
inline constexpr double nearest_reach = 8.0;

// prices[i]: per unit of forward, of the call when moneyness[i] = K/F >= 1 and of the put below.
// Returns the largest estimate of the absolute error. Each price depends on its own strike and
// maturity alone. A strike beyond one whose price is below the tolerance is worth 0.
inline double out_of_the_money_prices(const target_kernels& kernels, const model_parameters& m,
                                      const variance_curve& curve,
                                      std::span<const double> moneyness,
                                      std::span<const double> maturities, double tolerance,
                                      std::span<double> prices) {
    std::map<double, std::vector<std::size_t>> slices;
    for (std::size_t i = 0; i < maturities.size(); ++i) slices[maturities[i]].push_back(i);
    double worst = 0.0;
    for (auto& [maturity, members] : slices) {
        const double variance = effective_variance(kernels, m, curve, maturity);
        if (!(variance > 0.0)) {
            for (const auto i : members) prices[i] = 0.0;
            continue;
        }
        const double stdev = std::sqrt(variance);
        for (double reach = nearest_reach; !members.empty(); reach *= 2.0) {
            const auto found = line_of(kernels, m, curve, maturity, variance, reach, tolerance);
            std::vector<std::size_t> inside, beyond;
            std::vector<double> k;
            for (const auto i : members) {
                const double x = std::log(moneyness[i]);
                if (std::abs(x) <= reach * stdev) {
                    inside.push_back(i);
                    k.push_back(x);
                    worst = std::max(worst, found.error * std::exp(std::max(0.5 * x, 0.0)));
                    continue;
                }
                const double edge = x > 0.0 ? found.edge_call : found.edge_put;
                const double error = found.error * std::exp(x > 0.0 ? 0.5 * reach * stdev : 0.0);
                if (edge + error <= tolerance || reach * stdev > 300.0) {
                    prices[i] = 0.0;
                    worst = std::max(worst, edge + error);
                } else {
                    beyond.push_back(i);
                }
            }
            std::vector<double> values(k.size());
            fourier_slice(found.line, k, variance).prices(found.log_phi, values);
            for (std::size_t j = 0; j < k.size(); ++j)
                prices[inside[j]] = std::clamp(values[j], 0.0, std::exp(std::min(k[j], 0.0)));
            members.swap(beyond);
        }
    }
    return worst;
}

}  // namespace volterra

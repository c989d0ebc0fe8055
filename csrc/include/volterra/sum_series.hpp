// The loop that evaluates the tables of the graded scheme, once per instruction set.
#pragma once

#include "volterra/simd.hpp"

namespace volterra::VOLTERRA_TARGET {

// sum[i] = sum_n factor[n] series[n * stride + i], i < count; arrays may end anywhere.
inline void sum_series(const double* series, std::size_t stride, std::size_t terms,
                       const double* factor, std::size_t count, double* sum) {
    constexpr std::size_t unroll = 4;
    std::size_t i = 0;
    for (; i + unroll * pack_width <= count; i += unroll * pack_width) {
        pack acc[unroll] = {};
        for (std::size_t n = 0; n < terms; ++n) {
            const pack f = broadcast(factor[n]);
            for (std::size_t k = 0; k < unroll; ++k)
                acc[k] += f * load(series + n * stride + i + k * pack_width);
        }
        for (std::size_t k = 0; k < unroll; ++k) store(sum + i + k * pack_width, acc[k]);
    }
    for (; i < count; ++i) {
        double total = 0.0;
        for (std::size_t n = 0; n < terms; ++n) total += factor[n] * series[n * stride + i];
        sum[i] = total;
    }
}

}  // namespace volterra::VOLTERRA_TARGET

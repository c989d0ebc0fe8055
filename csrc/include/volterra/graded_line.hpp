// Many u on one of the lines Im u = 0 and Im u = -1/2: log phi is solved for at a few dozen nodes and
// interpolated.
//
// Whether a u is served this way, and from which nodes, depends on the model, the maturities, the
// tolerance and the u itself alone, never on the other u of the call: the line reaches from 0 to a
// power of two up to which |log phi| stays moderate at the longest maturity. Beyond it, or where the
// Chebyshev coefficients have not died out, every u is solved for itself.
#pragma once

#include <algorithm>
#include <cmath>
#include <complex>
#include <cstddef>
#include <span>
#include <vector>

#include "targets.hpp"
#include "volterra/aligned_buffer.hpp"
#include "volterra/graded_functional.hpp"
#include "volterra/model.hpp"

namespace volterra {

inline bool is_interpolated_line(double imaginary) { return imaginary == 0.0 || imaginary == -0.5; }

// log phi is divided by this before it is interpolated, so that the errors of the far nodes, where
// |log phi| is large, do not reach the near points.
inline double line_scale(double x) { return std::sqrt(1.0 + x * x / 64.0); }

struct line_grid {
    double imaginary;
    double reach;            // serves |Re u| <= reach
    std::vector<double> s;   // positive Chebyshev nodes in asinh(Re u), descending
    std::vector<double> scale;  // what log phi is divided by
    std::vector<std::complex<double>> u;

    bool empty() const { return s.empty(); }
};

// The grid of a line, empty if interpolation does not pay. `variance` is the average of the variance
// curve up to `maturity`, the longest one.
inline line_grid make_line_grid(const model_parameters& m, double imaginary, double maturity,
                                double variance, double tolerance) {
    constexpr double moderate = 100.0;  // |log phi| at the end of the line
    line_grid grid{imaginary, -1.0, {}, {}, {}};  // serves nobody
    const double alpha = m.alpha(), z = std::pow(maturity, alpha);
    const double settling = variance * maturity / (z * std::tgamma(2.0 - alpha));
    for (double reach = 2048.0; reach >= 16.0; reach *= 0.5) {
        const auto c = riccati(m, {reach, imaginary});
        // psi from its first term and its limit; then log phi = int g0 dpsi, g0 constant
        const double start = z * std::abs(c.c0) / std::tgamma(1.0 + alpha);
        const double root = std::abs(std::sqrt(c.c1 * c.c1 - 4.0 * c.c2 * c.c0) - c.c1);
        if (!(settling / (1.0 / start + 0.5 * root / std::abs(c.c0)) < moderate)) continue;
        grid.reach = reach;
        break;
    }
    if (grid.reach < 0.0) return grid;
    // Analytic in |Im s| < pi/2 at least: moments between 0 and 1 are finite, so the nearest
    // singularity lies at a distance of 1/2 or more from the line -1/2; the caller checks.
    const double end = std::asinh(grid.reach), ellipse = 0.5 * std::acos(-1.0) / end;
    const double rate = 2.0 * std::log(ellipse + std::sqrt(1.0 + ellipse * ellipse));
    const double wanted = -std::log(tolerance) / rate;
    const auto nodes = 8 * static_cast<std::size_t>(std::ceil(std::clamp(wanted, 16.0, 128.0) / 8.0));
    for (std::size_t j = 0; j < nodes; ++j) {
        const double theta = std::acos(-1.0) * (2.0 * static_cast<double>(j) + 1.0) /
                             (4.0 * static_cast<double>(nodes));
        grid.s.push_back(end * std::cos(theta));
        grid.scale.push_back(line_scale(std::sinh(grid.s.back())));
        grid.u.emplace_back(std::sinh(grid.s.back()), imaginary);
    }
    return grid;
}

// What the interpolation of each row of `at_nodes` (rows x N) neglects: the largest of its last
// Chebyshev coefficients. The error of log phi is of that size times line_scale.
inline std::vector<double> line_tails(const line_grid& grid,
                                      std::span<const std::complex<double>> at_nodes) {
    constexpr std::size_t last = 4;
    const std::size_t nodes = grid.s.size();
    std::vector<double> cosines(last * nodes);
    for (std::size_t k = 0; k < last; ++k)
        for (std::size_t j = 0; j < nodes; ++j)
            cosines[k * nodes + j] =
                2.0 / (grid.scale[j] * static_cast<double>(nodes)) *
                std::cos(std::acos(-1.0) * static_cast<double>((2 * nodes - 1 - k) * (2 * j + 1)) /
                         static_cast<double>(4 * nodes));
    std::vector<double> tails;
    for (std::size_t r = 0; r * nodes < at_nodes.size(); ++r) {
        double sums[last] = {};  // odd coefficients belong to the imaginary part, even ones to the real
        for (std::size_t j = 0; j < nodes; ++j) {
            const auto value = at_nodes[r * nodes + j];
            for (std::size_t k = 0; k < last; ++k)
                sums[k] += cosines[k * nodes + j] * (k % 2 ? value.real() : value.imag());
        }
        double most = 0.0;
        for (const double sum : sums) most = std::max(most, std::abs(sum));
        tails.push_back(most);
    }
    return tails;
}

// values[r * stride + which[i]] = row r of the interpolant at u[which[i]].
inline void interpolate_line(const target_kernels& kernels, const line_grid& grid,
                             std::span<const std::complex<double>> at_nodes,
                             std::span<const std::complex<double>> u,
                             std::span<const std::size_t> which,
                             std::span<std::complex<double>> values) {
    const std::size_t n = grid.s.size(), rows = at_nodes.size() / n, stride = u.size();
    const std::size_t count = (which.size() + line_points - 1) / line_points * line_points;
    aligned_buffer tables(3 * n + 2 * rows * n), points(2 * count), out(rows * 2 * count);
    aligned_buffer workspace(n * line_points);
    double *const square = tables.data(), *const weight = square + n, *const height = weight + n;
    double *const even = height + n, *const odd = even + rows * n;
    for (std::size_t j = 0; j < n; ++j) {
        square[j] = grid.s[j] * grid.s[j], height[j] = grid.s[j];
        const double theta = std::acos(-1.0) * (2.0 * static_cast<double>(j) + 1.0) /
                             (4.0 * static_cast<double>(n));
        weight[j] = (j % 2 ? -1.0 : 1.0) * std::sin(theta);
        for (std::size_t r = 0; r < rows; ++r) {
            even[r * n + j] = grid.s[j] / grid.scale[j] * at_nodes[r * n + j].real();
            odd[r * n + j] = at_nodes[r * n + j].imag() / grid.scale[j];
        }
    }
    double *const s = points.data(), *const scale = s + count;
    for (std::size_t i = 0; i < count; ++i) {
        const double x = u[which[std::min(i, which.size() - 1)]].real();
        s[i] = std::asinh(x), scale[i] = line_scale(x);
    }
    kernels.interpolate_line({n, square, weight, height, rows, even, odd, count, s, scale,
                              out.data(), workspace.data()});
    const bool contiguous = which.back() - which.front() + 1 == which.size();  // `which` ascends
    for (std::size_t r = 0; r < rows; ++r) {
        const double* const re = out.data() + r * 2 * count;
        const double* const im = re + count;
        std::complex<double>* const to = values.data() + r * stride;
        if (contiguous)
            for (std::size_t i = 0; i < which.size(); ++i) to[which[0] + i] = {re[i], im[i]};
        else
            for (std::size_t i = 0; i < which.size(); ++i) to[which[i]] = {re[i], im[i]};
    }
}

}  // namespace volterra

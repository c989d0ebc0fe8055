// Checks of the graded scheme against closed forms, frozen high-precision values and identities.
// Build: link with csrc/dispatch/*.cpp, each unit with its own flags. Exit status: failed checks.
#include <cmath>
#include <complex>
#include <cstdio>
#include <cstring>
#include <limits>
#include <thread>
#include <vector>

#include "volterra/classical.hpp"
#include "volterra/explosion.hpp"
#include "volterra/graded_transform.hpp"

using namespace volterra;
using complex = std::complex<double>;

static int failures = 0;

static void check(bool good, const char* what, double value) {
    if (good) return;
    ++failures;
    std::printf("FAILED: %s (%.3g)\n", what, value);
}

static std::vector<complex> solve(const target_kernels& kernels, const model_parameters& m,
                                  const variance_curve& curve, const std::vector<complex>& u,
                                  const std::vector<double>& maturities, double tolerance,
                                  std::vector<double>* errors = nullptr) {
    std::vector<complex> values(u.size() * maturities.size());
    const error_bounds bounds{1, std::vector<std::uint32_t>(u.size(), 0),
                              std::vector<double>(maturities.size(), tolerance)};
    if (errors) errors->assign(values.size(), 0.0);
    solve_log_transform(kernels, m, curve, u, maturities, bounds, false, values,
                        errors ? std::span<double>(*errors) : std::span<double>());
    return values;
}

// K * z^p is a Beta function on the first element; K * 1 = t^alpha / Gamma(1 + alpha) everywhere.
static void test_weights() {
    for (const double alpha : {0.501, 0.6, 0.75, 0.95})
        for (const std::size_t m : {std::size_t{4}, std::size_t{6}, std::size_t{8}, std::size_t{10}})
            for (const double q : {1.6, 2.5, 4.0}) {
                const std::size_t elements = 9;
                const auto plan = make_graded_plan(selected_kernels(), alpha, table_of(m, q), elements);
                const auto& shape = *plan.shape;
                std::vector<double> in_schur(m);
                auto expect = [&](const graded_operator& op, double t, std::size_t i, double own) {
                    double sum = own;
                    for (std::size_t k = 0; k < m; ++k)
                        sum += op.to_history[k * m + i] * in_schur[k];
                    const double exact = std::pow(t, alpha) / std::tgamma(1.0 + alpha);
                    // a basis of eigenvectors costs up to its condition number in ulps
                    const double allowed = m <= graded_diagonal_nodes ? 1e-13 : 5e-14;
                    check(std::abs(sum / exact - 1.0) < allowed, "row sum of the weights",
                          sum / exact - 1.0);
                };
                for (std::size_t k = 0; k < elements; ++k) {
                    // G = left^alpha on every element, 1 on the first
                    for (std::size_t i = 0; i < m; ++i) {
                        in_schur[i] = 0.0;
                        if (k == 0) {
                            in_schur[i] = plan.from_zero[i];
                            continue;
                        }
                        for (std::size_t j = 0; j <= m; ++j)
                            in_schur[i] += plan.from_first[((k - 1) * (m + 1) + j) * m + i];
                        for (std::size_t l = 1; l < k; ++l)
                            for (std::size_t j = 0; j < m; ++j)
                                in_schur[i] +=
                                    std::pow(q, alpha * static_cast<double>(l - 1)) *
                                    plan.lag[((elements - 2 - (k - l)) * m + j) * m + i];
                    }
                    const double left = std::pow(q, static_cast<double>(k) - 1.0);
                    for (std::size_t i = 0; i < m; ++i) {
                        double own = 0.0;
                        const auto& op = k ? plan.step : plan.start;
                        for (std::size_t j = 0; j < m; ++j) own += op.own[j * m + i];
                        if (k)
                            expect(op, left * shape.tau[i + 1], i, own * std::pow(left, alpha));
                        else
                            expect(op, std::pow(shape.x[i + 1], 1.0 / alpha), i, own);
                    }
                }
                for (std::size_t p = 1; p <= m; ++p)
                    for (std::size_t i = 0; i < m; ++i) {
                        const double pd = static_cast<double>(p), z = shape.x[i + 1];
                        double sum = 0.0;
                        for (std::size_t j = 0; j < m; ++j)
                            sum += plan.start.own[j * m + i] * std::pow(shape.x[j + 1], pd);
                        const double exact = std::tgamma(alpha * pd + 1) /
                                             std::tgamma(alpha * pd + alpha + 1) *
                                             std::pow(z, pd + 1);
                        check(std::abs(sum - exact) < 1e-14, "fractional integral of t^(alpha p)",
                              sum - exact);
                    }
            }
}

// log phi from the fractional power series of psi, summed by the epsilon algorithm with 90 digits
// (computed; 30 and more digits certified by its last two diagonals).
static void test_power_series() {
    struct reference {
        model_parameters m;
        variance_curve curve;
        complex u;
        double maturity;
        complex value;
    };
    const auto market = curve_form::market;
    const reference cases[] = {
        {{0.12, 0.331, -0.681, 0.1}, {market, 0, {9}, {0.0392}}, 10.0, 1.0,
         {-0.813566740977768022, 0.524950039024314374}},
        {{0.1, 0.4, -0.7, 0.0}, {market, 0, {0.25, 9}, {0.04, 0.09}}, {5.0, -0.5}, 0.75,
         {-0.423897122527334125, 0.231145754905085563}},
        {{0.02, 0.9, -0.9, 0.5}, {market, 0, {9}, {0.06}}, {20.0, -0.5}, 0.1,
         {-0.21828818156631213, 0.315960102921172836}},
        {{0.3, 1.0, 0.3, 2.0}, {market, 0, {0.01, 9}, {0.09, 0.04}}, 30.0, 0.05,
         {-0.643814507914135985, -0.195606195259019276}},
        {{0.45, 0.6, -1.0, 1.0}, {market, 0, {9}, {0.05}}, {12.0, -1.0}, 0.5,
         {-0.481717394894404975, 0.745003644966413427}},
    };
    for (const auto& c : cases)
        for (const double tolerance : {1e-6, 1e-8, 1e-10, 1e-12}) {
            std::vector<double> errors;
            const auto value = solve(selected_kernels(), c.m, c.curve, {c.u}, {c.maturity},
                                     tolerance, &errors)[0];
            const double error = std::abs(std::exp(value) - std::exp(c.value));
            check(error <= tolerance, "power series: tolerance", error / tolerance);
            check(error <= errors[0], "power series: estimate", error / errors[0]);
        }
}

// A closed form of the classical model (hurst = 1/2), market and driven curves with jumps.
static void test_classical() {
    const model_parameters m{0.5, 0.6, -0.7, 1.0};
    std::vector<complex> u;
    for (int i = 0; i < 40; ++i) u.push_back({std::pow(1.2, i), i % 2 ? -0.5 : 0.0});
    const std::vector<double> maturities = {1.0 / 365, 0.1, 0.5, 2.0, 10.0};
    for (const auto form : {curve_form::market, curve_form::driven}) {
        const variance_curve curve{form, 0.05, {0.3, 1.0}, {0.04, 0.09, 0.06}};
        std::vector<double> errors;
        const auto values =
            solve(selected_kernels(), m, curve, u, maturities, 1e-8, &errors);
        std::vector<complex> basis(curve.basis_size());
        for (std::size_t t = 0; t < maturities.size(); ++t)
            for (std::size_t i = 0; i < u.size(); ++i) {
                classical_basis(m, curve, u[i], maturities[t], basis.data());
                complex exact = form == curve_form::driven ? curve.initial * basis[0] : 0.0;
                for (std::size_t k = 0; k < 3; ++k)
                    exact += curve.levels[k] * basis[k + (form == curve_form::driven)];
                const std::size_t at = t * u.size() + i;
                const double error = std::abs(std::exp(values[at]) - std::exp(exact));
                check(error <= 1e-8, "classical closed form", error);
                check(error <= errors[at], "classical: estimate", error / errors[at]);
            }
    }
}

// Bits do not depend on companions, on the order of u or on threads; instruction sets agree.
static void test_invariance() {
    const model_parameters m{0.1, 0.4, -0.7, 0.3};
    const variance_curve curve{curve_form::driven, 0.04, {0.1, 1.0}, {0.02, 0.01, 0.03}};
    std::vector<complex> u;
    for (int i = 0; i < 61; ++i) u.push_back({5.0 * i, i % 3 ? -0.5 : 0.0});
    const std::vector<double> maturities = {0.02, 0.3, 2.0};
    std::vector<complex> first;
    for (auto* kernels = available_kernels(); *kernels; ++kernels) {
        const auto values = solve(**kernels, m, curve, u, maturities, 1e-8);
        auto same = [&](const std::vector<complex>& some, std::size_t width, std::size_t from,
                        std::size_t to) {
            for (std::size_t t = 0; t < maturities.size(); ++t)
                check(std::memcmp(&some[t * width + from], &values[t * u.size() + to],
                                  sizeof(complex)) == 0,
                      "bits depend on companions", static_cast<double>(to));
        };
        const std::vector<complex> reversed(u.rbegin(), u.rend());
        const auto backwards = solve(**kernels, m, curve, reversed, maturities, 1e-8);
        for (std::size_t i = 0; i < u.size(); ++i) {
            same(solve(**kernels, m, curve, {u[i]}, maturities, 1e-8), 1, 0, i);
            same(backwards, u.size(), u.size() - 1 - i, i);
        }
        std::vector<std::vector<complex>> parallel(4);
        std::vector<std::thread> threads;
        for (auto& result : parallel)
            threads.emplace_back(
                [&] { result = solve(**kernels, m, curve, u, maturities, 1e-8); });
        for (auto& thread : threads) thread.join();
        for (const auto& result : parallel)
            for (std::size_t i = 0; i < u.size(); ++i) same(result, u.size(), i, i);
        if (first.empty()) first = values;
        for (std::size_t i = 0; i < values.size(); ++i) {
            const double difference = std::abs(std::exp(values[i]) - std::exp(first[i]));
            check(difference < 1e-13, "instruction sets disagree", difference);
        }
    }
}

// log phi is linear in the curve: the functionals of the elementary curves add up.
static void test_basis() {
    const model_parameters m{0.15, 0.5, -0.6, 0.7};
    const std::vector<complex> u = {{1.0, -0.5}, {17.0, -0.5}, {80.0, 0.0}};
    const std::vector<double> maturities = {0.05, 0.7, 1.5};
    const std::vector<std::size_t> all = {0, 1, 2};
    for (const auto form : {curve_form::market, curve_form::driven}) {
        const variance_curve curve{form, 0.03, {0.2, 1.0}, {0.04, 0.02, 0.05}};
        const std::size_t per = curve.basis_size();
        std::vector<complex> rows(per * 9), values(9);
        graded_record record(3);
        const std::vector<double> never(3, -std::numeric_limits<double>::infinity());
        const auto level = graded_ladder(m.hurst, 5);
        graded_pass(selected_kernels(), level, m, curve, u, all, maturities, true, false, never,
                    rows, record);
        graded_pass(selected_kernels(), level, m, curve, u, all, maturities, false, false, never,
                    values, record);
        for (std::size_t t = 0; t < 3; ++t)
            for (std::size_t i = 0; i < 3; ++i) {
                complex sum = 0.0;
                for (std::size_t r = 0; r < per; ++r) {
                    const bool driven = form == curve_form::driven;
                    const double level_r = driven ? (r ? curve.levels[r - 1] : curve.initial)
                                                  : curve.levels[r];
                    sum += level_r * rows[(t * per + r) * 3 + i];
                }
                const double error = std::abs(sum - values[t * 3 + i]);
                check(error < 1e-13 * std::max(1.0, std::abs(sum)), "basis rows", error);
            }
    }
}

// Past its explosion time a real moment is never a finite number.
static void test_explosion() {
    for (const double hurst : {0.02, 0.1, 0.3, 0.45})
        for (const double p : {-30.0, -5.0, 10.0, 40.0}) {
            const model_parameters m{hurst, 0.6, 0.3, 0.3};
            const variance_curve curve{curve_form::market, 0.0, {1.0}, {0.04}};
            double low = 1e-4, high = 50.0;
            for (int i = 0; i < 40; ++i) {
                const double middle = std::sqrt(low * high);
                (moment_explodes(m, p, middle) ? high : low) = middle;
            }
            for (const double factor : {1.05, 1.5, 4.0}) {
                const auto value = solve(selected_kernels(), m, curve, {complex(0.0, -p)},
                                         {factor * high}, 1e-8)[0];
                check(std::isnan(value.real()), "finite number past an explosion", factor);
            }
            const auto before =
                solve(selected_kernels(), m, curve, {complex(0.0, -p)}, {0.5 * high}, 1e-8)[0];
            check(before.real() > 0.0, "moment before its explosion", before.real());
        }
}

int main() {
    test_weights();
    test_power_series();
    test_classical();
    test_invariance();
    test_basis();
    test_explosion();
    std::printf("%d failed checks\n", failures);
    return failures != 0;
}

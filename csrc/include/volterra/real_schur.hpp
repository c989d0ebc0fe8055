// Real Schur form of one small real matrix: A = Q S Q^T, Q orthogonal, S upper triangular but for
// 2 x 2 diagonal blocks. Householder reduction to Hessenberg form, then Francis's implicit double
// shift. Source: Matrix Computations, 4th edition, 2013, algorithms 7.4.2 and 7.5.1 (from memory).
#pragma once

#include <cmath>
#include <cstddef>
#include <utility>

namespace volterra {

namespace detail {

// Applies I - 2 v v^T / v^T v, v of `size` entries, to rows and columns at, at + 1, ... of the n x n
// matrix s and to the columns of q.
inline void reflect(double* s, double* q, std::size_t n, std::size_t at, const double* v,
                    std::size_t size) {
    double norm = 0.0, sum[16] = {};
    for (std::size_t i = 0; i < size; ++i) norm += v[i] * v[i];
    if (norm == 0.0) return;
    const double beta = 2.0 / norm;
    for (std::size_t i = 0; i < size; ++i)
        for (std::size_t j = 0; j < n; ++j) sum[j] += v[i] * s[(at + i) * n + j];
    for (std::size_t i = 0; i < size; ++i)
        for (std::size_t j = 0; j < n; ++j) s[(at + i) * n + j] -= beta * v[i] * sum[j];
    for (double* matrix : {s, q})
        for (std::size_t i = 0; i < n; ++i) {
            double* row = matrix + i * n + at;
            double dot = 0.0;
            for (std::size_t j = 0; j < size; ++j) dot += row[j] * v[j];
            for (std::size_t j = 0; j < size; ++j) row[j] -= beta * dot * v[j];
        }
}

// The same for v of 3 entries and a known n.
template <std::size_t n>
inline void reflect3(double* s, double* q, std::size_t at, const double* v) {
    const double norm = v[0] * v[0] + v[1] * v[1] + v[2] * v[2];
    if (norm == 0.0) return;
    const double beta = 2.0 / norm, w0 = beta * v[0], w1 = beta * v[1], w2 = beta * v[2];
    double *a = s + at * n, *b = a + n, *c = b + n;
    for (std::size_t j = 0; j < n; ++j) {
        const double dot = v[0] * a[j] + v[1] * b[j] + v[2] * c[j];
        a[j] -= w0 * dot, b[j] -= w1 * dot, c[j] -= w2 * dot;
    }
    for (double* matrix : {s, q})
        for (std::size_t i = 0; i < n; ++i) {
            double* row = matrix + i * n + at;
            const double dot = v[0] * row[0] + v[1] * row[1] + v[2] * row[2];
            row[0] -= w0 * dot, row[1] -= w1 * dot, row[2] -= w2 * dot;
        }
}

// Householder vector that maps x to a multiple of the first unit vector.
inline void householder(const double* x, std::size_t size, double* v) {
    double norm = 0.0;
    for (std::size_t i = 0; i < size; ++i) norm += x[i] * x[i], v[i] = x[i];
    v[0] += std::copysign(std::sqrt(norm), x[0]);
}

}  // namespace detail

// Overwrites the n x n matrix s by S and q by Q, n <= 16. Returns false if the iteration did not
// converge. Entries below the diagonal blocks are exact zeros.
template <std::size_t n>
inline bool real_schur(double* s, double* q) {
    double x[16], v[16];
    for (std::size_t i = 0; i < n * n; ++i) q[i] = i % (n + 1) == 0 ? 1.0 : 0.0;
    for (std::size_t k = 0; k + 2 < n; ++k) {
        for (std::size_t i = k + 1; i < n; ++i) x[i - k - 1] = s[i * n + k];
        detail::householder(x, n - k - 1, v);
        detail::reflect(s, q, n, k + 1, v, n - k - 1);
        for (std::size_t i = k + 2; i < n; ++i) s[i * n + k] = 0.0;
    }
    std::size_t end = n;  // the active block ends before this row
    for (int sweep = 0; end > 2; ++sweep) {
        if (sweep > 200) return false;
        std::size_t begin = end - 1;
        while (begin > 0) {
            const double size = std::abs(s[begin * n + begin]) + std::abs(s[(begin - 1) * (n + 1)]);
            if (std::abs(s[begin * n + begin - 1]) <= 1.1e-16 * size) break;
            --begin;
        }
        if (begin > 0) s[begin * n + begin - 1] = 0.0;
        if (end - begin <= 2) {
            end = begin;
            continue;
        }
        const double *low = s + (end - 1) * n + end - 1, *high = s + (end - 2) * n + end - 2;
        double trace = *low + *high, det = *low * *high - low[-1] * high[1];
        if (sweep % 11 == 10) trace = 1.5 * std::abs(low[-1]) + *low, det = *low * *low;
        const double* b = s + begin * n + begin;
        x[0] = b[0] * b[0] + b[1] * b[n] - trace * b[0] + det;
        x[1] = b[n] * (b[0] + b[n + 1] - trace);
        x[2] = b[n] * b[2 * n + 1];
        for (std::size_t k = begin; k + 1 < end; ++k) {
            const std::size_t size = k + 2 < end ? 3 : 2;
            detail::householder(x, size, v);
            if (size == 3)
                detail::reflect3<n>(s, q, k, v);
            else
                detail::reflect(s, q, n, k, v, size);
            if (k > begin)
                for (std::size_t i = k + 1; i < k + size; ++i) s[i * n + k - 1] = 0.0;
            for (std::size_t i = 0; i < 3 && k + 1 + i < end; ++i) x[i] = s[(k + 1 + i) * n + k];
        }
    }
    return true;
}

// Moves real eigenvalues up until every 2 x 2 block starts at an even row, n even: the diagonal is
// then a sequence of aligned 2 x 2 blocks, some of them triangular.
inline void align_schur(double* s, double* q, std::size_t n) {
    auto starts_pair = [&](std::size_t i) { return i + 1 < n && s[(i + 1) * n + i] != 0.0; };
    for (std::size_t i = 0; i + 1 < n; i += 2) {
        if (starts_pair(i)) continue;
        std::size_t j = i + 1;  // the next real eigenvalue
        while (j < n && starts_pair(j)) j += 2;
        for (; j > i + 1; j -= 2) {
            // (x, 1) is the eigenvector of [pair a; 0 b] for b: a reflection that maps it to the
            // first unit vector puts b first.
            const double* t = s + (j - 2) * n + j - 2;
            const double b = t[2 * n + 2], p = t[0] - b, r = t[n + 1] - b;
            const double det = p * r - t[1] * t[n];
            const double x[3] = {(-r * t[2] + t[1] * t[n + 2]) / det,
                                 (t[n] * t[2] - p * t[n + 2]) / det, 1.0};
            double v[3];
            detail::householder(x, 3, v);
            detail::reflect(s, q, n, j - 2, v, 3);
            s[(j - 1) * n + j - 2] = s[j * n + j - 2] = 0.0;
        }
    }
}

// For an aligned real Schur form S, n even: the unit block upper triangular X with S X = X D, D the
// diagonal blocks of S. Returns false if two blocks are too close for X to be moderate.
inline bool block_eigenvectors(const double* s, double* x, std::size_t n) {
    for (std::size_t i = 0; i < n * n; ++i) x[i] = i % (n + 1) == 0 ? 1.0 : 0.0;
    for (std::size_t j = 2; j < n; j += 2)
        for (std::size_t i = j; i >= 2;) {
            i -= 2;
            // S_ii Y - Y S_jj = -sum_k S_ik X_kj as four equations, Y row by row
            double a[4][5] = {};
            for (std::size_t r = 0; r < 2; ++r)
                for (std::size_t c = 0; c < 2; ++c) {
                    double* row = a[2 * r + c];
                    for (std::size_t k = 0; k < 2; ++k) {
                        row[2 * k + c] += s[(i + r) * n + i + k];
                        row[2 * r + k] -= s[(j + k) * n + j + c];
                    }
                    for (std::size_t k = i + 2; k <= j + 1; ++k)
                        row[4] -= s[(i + r) * n + k] * x[k * n + j + c];
                }
            for (std::size_t k = 0; k < 4; ++k) {
                std::size_t best = k;
                for (std::size_t r = k + 1; r < 4; ++r)
                    if (std::abs(a[r][k]) > std::abs(a[best][k])) best = r;
                for (std::size_t c = 0; c < 5; ++c) std::swap(a[k][c], a[best][c]);
                if (a[k][k] == 0.0) return false;
                for (std::size_t r = 0; r < 4; ++r) {
                    if (r == k) continue;
                    const double f = a[r][k] / a[k][k];
                    for (std::size_t c = k; c < 5; ++c) a[r][c] -= f * a[k][c];
                }
            }
            for (std::size_t r = 0; r < 4; ++r) {
                const double y = a[r][4] / a[r][r];
                if (!(std::abs(y) < 1e4)) return false;
                x[(i + r / 2) * n + j + r % 2] = y;
            }
        }
    return true;
}

}  // namespace volterra

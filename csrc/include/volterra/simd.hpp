// Packs of doubles: the widest vector the instruction set of this translation unit offers.
//
// Everything that is compiled once per instruction set lives in namespace
// volterra::VOLTERRA_TARGET, so that the linker can never mix two instantiations. For the same
// reason no standard-library template is used in such code: its instantiations would be shared.
// A unit names its target before the first include; a plain C++ user gets one called `native`.
#pragma once

#include <cstddef>
#include <cstring>

#ifndef VOLTERRA_TARGET
#define VOLTERRA_TARGET native
#endif

#if defined(__GNUC__) || defined(__clang__)
#define VOLTERRA_INLINE inline __attribute__((always_inline))
#else
#define VOLTERRA_INLINE __forceinline
#endif

namespace volterra::VOLTERRA_TARGET {

#if defined(__AVX512F__)
inline constexpr std::size_t pack_width = 8;
inline constexpr std::size_t vector_registers = 32;
#elif defined(__AVX__)
inline constexpr std::size_t pack_width = 4;
inline constexpr std::size_t vector_registers = 16;
#elif defined(__aarch64__)
inline constexpr std::size_t pack_width = 2;
inline constexpr std::size_t vector_registers = 32;
#else
inline constexpr std::size_t pack_width = 2;
inline constexpr std::size_t vector_registers = 16;
#endif

#if defined(__GNUC__) || defined(__clang__)

// Arithmetic, comparison and `mask ? a : b` come with the compiler's vector extension.
typedef double pack __attribute__((vector_size(sizeof(double) * pack_width)));

VOLTERRA_INLINE pack sqrt(pack x) {
    pack r = x;
    for (std::size_t i = 0; i < pack_width; ++i) r[i] = __builtin_sqrt(x[i]);
    return r;
}
VOLTERRA_INLINE pack abs(pack x) { return x < 0.0 ? -x : x; }

#else
#error "a compiler with vector extensions is required (g++, clang++ or clang-cl)"
#endif

VOLTERRA_INLINE pack load(const double* p) {
    pack r;
    std::memcpy(&r, p, sizeof r);
    return r;
}
VOLTERRA_INLINE void store(double* p, pack x) { std::memcpy(p, &x, sizeof x); }
VOLTERRA_INLINE pack broadcast(double x) { return x - pack{}; }

// 2 to the power of x rounded to an integer, |x| < 1000.
VOLTERRA_INLINE pack power_of_two(pack x) {
    typedef long long bits __attribute__((vector_size(sizeof(pack))));
    const pack shifted = x + broadcast(6755399441055744.0);  // 1.5 x 2^52: the integer is in the low bits
    const bits exponent = (reinterpret_cast<bits>(shifted) << 52) + 0x3ff0000000000000LL;
    return reinterpret_cast<pack>(exponent);
}

// A pack of complex numbers, split into real and imaginary parts. std::complex is avoided: its
// product calls a library routine for the sake of infinities and does not vectorise.
struct complex_pack {
    pack re, im;
};

VOLTERRA_INLINE complex_pack operator+(complex_pack a, complex_pack b) {
    return {a.re + b.re, a.im + b.im};
}
VOLTERRA_INLINE complex_pack operator-(complex_pack a, complex_pack b) {
    return {a.re - b.re, a.im - b.im};
}
VOLTERRA_INLINE complex_pack operator*(complex_pack a, complex_pack b) {
    return {a.re * b.re - a.im * b.im, a.re * b.im + a.im * b.re};
}
VOLTERRA_INLINE complex_pack operator*(pack a, complex_pack b) { return {a * b.re, a * b.im}; }

VOLTERRA_INLINE complex_pack operator/(complex_pack a, complex_pack b) {
    const pack scale = 1.0 / (b.re * b.re + b.im * b.im);
    return {(a.re * b.re + a.im * b.im) * scale, (a.im * b.re - a.re * b.im) * scale};
}

// 2 e / (q + sqrt(z)), principal square root: the root of smaller modulus of a quadratic in its
// cancellation-free form. With l = sqrt((|z| + |Re z|)/2) the square root is (l, Im z / (2l)) on the
// right half plane and (|Im z| / (2l), +-l) on the left; numerator and denominator are multiplied by
// l, which leaves a single division.
VOLTERRA_INLINE complex_pack quadratic_root(complex_pack e, complex_pack q, complex_pack z) {
    const pack half = 0.5 * (sqrt(z.re * z.re + z.im * z.im) + abs(z.re));  // l^2
    const pack l = half > 0.0 ? sqrt(half) : broadcast(1.0);
    const auto right = z.re >= 0.0;
    const pack re = right ? half : 0.5 * abs(z.im);
    const pack im = right ? 0.5 * z.im : (z.im < 0.0 ? -half : half);
    return ((2.0 * l) * e) / complex_pack{l * q.re + re, l * q.im + im};
}

// Principal square root (real part >= 0) by the half-angle formula, stable on both half planes.
VOLTERRA_INLINE complex_pack sqrt(complex_pack z) {
    const pack modulus = sqrt(z.re * z.re + z.im * z.im);
    const pack larger = sqrt(0.5 * (modulus + abs(z.re)));
    const pack smaller = larger > 0.0 ? 0.5 * z.im / larger : broadcast(0.0);
    const auto right = z.re >= 0.0;
    return {right ? larger : abs(smaller), right ? smaller : (z.im < 0.0 ? -larger : larger)};
}

}  // namespace volterra::VOLTERRA_TARGET

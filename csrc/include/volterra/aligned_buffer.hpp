// Doubles on a cache-line boundary, so that no vector load straddles two lines.
#pragma once

#include <cstddef>
#include <memory>
#include <new>

namespace volterra {

struct aligned_delete {
    void operator()(double* p) const noexcept { ::operator delete(p, std::align_val_t{64}); }
};

using aligned_buffer = std::unique_ptr<double[], aligned_delete>;

inline aligned_buffer make_aligned_buffer(std::size_t size) {
    void* const memory = ::operator new(size * sizeof(double), std::align_val_t{64});
    return aligned_buffer(static_cast<double*>(memory));
}

}  // namespace volterra

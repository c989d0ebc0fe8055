// Doubles on a cache-line boundary: a vector load that straddles two lines costs twice.
#pragma once

#include <algorithm>
#include <cstddef>
#include <memory>
#include <new>

namespace volterra {

class aligned_buffer {
public:
    explicit aligned_buffer(std::size_t size)
        : data_(static_cast<double*>(::operator new(size * sizeof(double), alignment))) {
        std::fill_n(data_.get(), size, 0.0);
    }
    double* data() { return data_.get(); }
    double& operator[](std::size_t i) { return data_[i]; }

private:
    static constexpr std::align_val_t alignment{64};
    struct release {
        void operator()(double* p) const noexcept { ::operator delete(p, alignment); }
    };
    std::unique_ptr<double[], release> data_;
};

}  // namespace volterra

// The one place where arrays cross the border between Python and C++.
//
// Python prepares contiguous one- or two-dimensional arrays of the exact type; here they are
// checked, never copied, and turned into spans. A wrong type or layout is a TypeError, a wrong
// shape a ValueError, and both name the argument.
#pragma once

#include <pybind11/numpy.h>
#include <pybind11/pybind11.h>

#include <complex>
#include <cstddef>
#include <span>
#include <string>
#include <vector>

namespace volterra::bindings {

namespace py = pybind11;

using complex = std::complex<double>;

template <class T>
std::span<const T> input(const py::array& array, const char* name) {
    if (!py::isinstance<py::array_t<T>>(array) || !(array.flags() & py::array::c_style))
        throw py::type_error(std::string(name) + " must be a C-contiguous array of " +
                             std::string(py::str(static_cast<py::object>(py::dtype::of<T>()))) + ", got " +
                             std::string(py::str(static_cast<py::object>(array.dtype()))));
    return {static_cast<const T*>(array.data()), static_cast<std::size_t>(array.size())};
}

template <class T>
std::span<const T> input(const py::array& array, const char* name, std::size_t size) {
    const auto values = input<T>(array, name);
    if (values.size() != size)
        throw py::value_error(std::string(name) + " must have " + std::to_string(size) +
                              " elements, got " + std::to_string(values.size()));
    return values;
}

template <class T>
py::array_t<T> owning(std::vector<py::ssize_t> shape) {
    return py::array_t<T>(std::move(shape));
}

template <class T>
std::span<T> output(py::array_t<T>& array) {
    return {array.mutable_data(), static_cast<std::size_t>(array.size())};
}

}  // namespace volterra::bindings

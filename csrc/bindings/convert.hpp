// Python arguments that stand for C++ structs of model.hpp.
#pragma once

#include <string>

#include "arrays.hpp"
#include "volterra/model.hpp"

namespace volterra::bindings {

// (hurst, vol_of_vol, correlation, mean_reversion)
inline model_parameters to_model(const py::tuple& t) {
    if (t.size() != 4) throw py::value_error("model must be a tuple of four numbers");
    return {t[0].cast<double>(), t[1].cast<double>(), t[2].cast<double>(), t[3].cast<double>()};
}

// (driven, initial, times, levels)
inline variance_curve to_curve(const py::tuple& t) {
    if (t.size() != 4) throw py::value_error("curve must be a tuple of four entries");
    const auto times = input<double>(t[2].cast<py::array>(), "times");
    const auto levels = input<double>(t[3].cast<py::array>(), "levels", times.size());
    if (levels.empty()) throw py::value_error("levels must not be empty");
    return {t[0].cast<bool>() ? curve_form::driven : curve_form::market, t[1].cast<double>(),
            {times.begin(), times.end()}, {levels.begin(), levels.end()}};
}

}  // namespace volterra::bindings

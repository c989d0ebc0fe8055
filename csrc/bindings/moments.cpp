// Explosion times and the strip of finite moments.
#include <utility>

#include "convert.hpp"
#include "volterra/explosion.hpp"

namespace volterra::bindings {

void bind_moments(py::module_& module) {
    module.def(
        "explosion_time",
        [](const py::tuple& model, double moment) {
            const auto m = to_model(model);
            py::gil_scoped_release release;  // safe: no Python object is touched
            return explosion_time(m, moment);
        },
        py::arg("model"), py::arg("moment"),
        "First time at which E[exp(moment X)] is infinite; inf if there is none.");
    module.def(
        "moment_strip",
        [](const py::tuple& model, double maturity) {
            const auto m = to_model(model);
            py::gil_scoped_release release;  // safe: no Python object is touched
            return std::pair(critical_moment(m, -1.0, maturity), critical_moment(m, 1.0, maturity));
        },
        py::arg("model"), py::arg("maturity"),
        "(lower, upper): E[exp(p X_T)] is finite for lower < p < upper.");
}

}  // namespace volterra::bindings

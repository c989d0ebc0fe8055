// Mittag-Leffler functions: resolvents of the fractional kernel.
#include "arrays.hpp"
#include "volterra/mittag_leffler.hpp"

namespace volterra::bindings {

void bind_resolvents(py::module_& module) {
    module.def(
        "mittag_leffler_kernel",
        [](double alpha, double beta, double rate, const py::array& t) {
            const auto times = input<double>(t, "t");
            auto values = owning<double>({static_cast<py::ssize_t>(times.size())});
            const auto to = output(values);
            for (std::size_t i = 0; i < times.size(); ++i)
                to[i] = mittag_leffler_kernel(alpha, beta, rate, times[i]);
            return values;
        },
        py::arg("alpha"), py::arg("beta"), py::arg("rate"), py::arg("t"),
        "t^(beta-1) E_{alpha,beta}(-rate t^alpha) for t >= 0, rate >= 0, 0 < alpha <= 1.");
}

}  // namespace volterra::bindings

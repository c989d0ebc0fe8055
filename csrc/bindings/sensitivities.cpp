// The log-transform together with its derivatives with respect to the parameters.
#include "convert.hpp"
#include "volterra/graded_sensitivities.hpp"

namespace volterra::bindings {

namespace {

py::tuple transform_sensitivities(const py::tuple& model, const py::tuple& curve, const py::array& u,
                                  const py::array& maturities, const py::tuple& wanted,
                                  double tolerance, std::size_t threads) {
    const auto m = to_model(model);
    const auto c = to_curve(curve);
    const auto nodes = input<complex>(u, "u");
    const auto times = input<double>(maturities, "maturities");
    if (wanted.size() != 5) throw py::value_error("wanted must be a tuple of five flags");
    const sensitivity_request request{wanted[0].cast<bool>(), wanted[1].cast<bool>(),
                                      wanted[2].cast<bool>(), wanted[3].cast<bool>(),
                                      wanted[4].cast<bool>(), tolerance, threads};
    for (std::size_t t = 1; t < times.size(); ++t)
        if (!(times[t] > times[t - 1])) throw py::value_error("maturities must ascend");
    const auto rows = static_cast<py::ssize_t>(times.size());
    const auto columns = static_cast<py::ssize_t>(nodes.size());
    const auto curves = static_cast<py::ssize_t>(request.curve ? c.basis_size() : 0);
    auto values = owning<complex>({rows, columns});
    auto sensitivities =
        owning<complex>({static_cast<py::ssize_t>(request.parameters()), rows, columns});
    auto basis = owning<complex>({curves, rows, columns});
    const auto to_values = output(values), to_sensitivities = output(sensitivities);
    const auto to_basis = output(basis);
    std::size_t missed = 0;
    {
        py::gil_scoped_release release;  // safe: only C++ copies and arrays held by the caller
        missed = log_sensitivities_into(selected_kernels(), m, c, nodes, times, request, to_values,
                                        to_sensitivities, to_basis);
    }
    return py::make_tuple(values, sensitivities, basis, missed);
}

}  // namespace

void bind_sensitivities(py::module_& module) {
    module.def("transform_sensitivities", &transform_sensitivities, py::arg("model"),
               py::arg("curve"), py::arg("u"), py::arg("maturities"), py::arg("wanted"),
               py::arg("tolerance"), py::arg("threads") = 1,
               "(values, parameters x maturities x u, elementary curves x maturities x u, number of u "
               "that missed the tolerance); wanted: hurst, vol_of_vol, correlation, mean_reversion, "
               "curve; maturities ascend.");
}

}  // namespace volterra::bindings

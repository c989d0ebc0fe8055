// The log-transform and its raw solvers.
#include "convert.hpp"
#include "volterra/transform.hpp"

namespace volterra::bindings {

namespace {

scheme to_scheme(const std::string& name) {
    if (name == "auto") return scheme::automatic;
    if (name == "graded") return scheme::graded;
    if (name == "adams") return scheme::adams;
    throw py::value_error("scheme must be one of 'auto', 'graded', 'adams', got '" + name + "'");
}

const target_kernels& to_kernels(const std::string& instruction_set) {
    if (instruction_set.empty()) return selected_kernels();
    for (auto* kernels = available_kernels(); *kernels; ++kernels)
        if (instruction_set == (*kernels)->name) return **kernels;
    throw py::value_error("instruction_set '" + instruction_set + "' is not available here");
}

py::tuple transform(const py::tuple& model, const py::tuple& curve, const py::array& u,
                    const py::array& maturities, const std::string& method, std::size_t steps,
                    double tolerance, std::size_t threads, bool estimate) {
    const auto m = to_model(model);
    const auto c = to_curve(curve);
    const auto nodes = input<complex>(u, "u");
    const auto times = input<double>(maturities, "maturities");
    const transform_options options{to_scheme(method), steps, tolerance, threads, estimate};
    const auto rows = static_cast<py::ssize_t>(times.size());
    const auto columns = static_cast<py::ssize_t>(nodes.size());
    auto values = owning<complex>({rows, columns});
    auto errors = owning<double>({estimate ? rows : 0, columns});
    const auto to_values = output(values);
    const auto to_errors = output(errors);
    double worst = 0.0;
    {
        py::gil_scoped_release release;  // safe: only C++ copies and arrays held by the caller
        worst = log_transform_into(selected_kernels(), m, c, nodes, times, options, to_values,
                                   to_errors);
    }
    return py::make_tuple(values, errors, worst);
}

py::array_t<complex> adams_solution(const py::tuple& model, const py::array& u, double horizon,
                                    std::size_t steps, const std::string& instruction_set) {
    const auto m = to_model(model);
    const auto nodes = input<complex>(u, "u");
    const auto& kernels = to_kernels(instruction_set);
    auto psi = owning<complex>({static_cast<py::ssize_t>(steps + 1),
                                static_cast<py::ssize_t>(nodes.size())});
    const auto to = output(psi);
    {
        py::gil_scoped_release release;  // safe: no Python object is touched
        solve_adams(kernels, m, nodes, horizon, steps, {}, {}, to);
    }
    return psi;
}

py::array_t<complex> basis_transform(const py::tuple& model, const py::tuple& curve,
                                     const py::array& u, double maturity, std::size_t steps,
                                     const std::string& instruction_set) {
    const auto m = to_model(model);
    const auto c = to_curve(curve);
    const auto nodes = input<complex>(u, "u");
    const auto& kernels = to_kernels(instruction_set);
    auto values = owning<complex>({static_cast<py::ssize_t>(c.basis_size()),
                                   static_cast<py::ssize_t>(nodes.size())});
    const auto to = output(values);
    {
        py::gil_scoped_release release;  // safe: no Python object is touched
        solve_adams(kernels, m, nodes, maturity, steps,
                    uniform_functional(c, m.mean_reversion, maturity, steps, true), to);
    }
    return values;
}

}  // namespace

void bind_transform(py::module_& module) {
    py::register_local_exception_translator([](std::exception_ptr error) {
        try {
            if (error) std::rethrow_exception(error);
        } catch (const moment_explosion_error& e) {
            const auto type = py::module_::import("pyvolterra.errors").attr("MomentExplosionError");
            PyErr_SetString(type.ptr(), e.what());
        }
    });
    module.def("log_transform", &transform, py::arg("model"), py::arg("curve"), py::arg("u"),
               py::arg("maturities"), py::arg("scheme"), py::arg("steps"), py::arg("tolerance"),
               py::arg("threads") = 1, py::arg("estimate") = true,
               "(values, errors, worst error/tolerance): log E[exp(iuX_T)], maturities x u; no "
               "errors without `estimate`.");
    module.def("adams_solution", &adams_solution, py::arg("model"), py::arg("u"),
               py::arg("horizon"), py::arg("steps"), py::arg("instruction_set") = "",
               "psi at the nodes of a uniform mesh, (steps + 1) x u.");
    module.def("basis_transform", &basis_transform, py::arg("model"), py::arg("curve"),
               py::arg("u"), py::arg("maturity"), py::arg("steps"),
               py::arg("instruction_set") = "",
               "log-transforms of the elementary curves (V0 first if driven), basis x u.");
}

}  // namespace volterra::bindings

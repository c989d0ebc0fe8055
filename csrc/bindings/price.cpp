// Prices from the transform, and the frozen Fourier slices that a fit re-prices many times.
#include "convert.hpp"
#include "volterra/price.hpp"

namespace volterra::bindings {

namespace {

py::tuple prices(const py::tuple& model, const py::tuple& curve, const py::array& moneyness,
                 const py::array& maturities, double tolerance) {
    const auto m = to_model(model);
    const auto c = to_curve(curve);
    const auto strikes = input<double>(moneyness, "moneyness");
    const auto times = input<double>(maturities, "maturities", strikes.size());
    auto values = owning<double>({static_cast<py::ssize_t>(strikes.size())});
    const auto to = output(values);
    double error = 0.0;
    {
        py::gil_scoped_release release;  // safe: no Python object is touched
        error = out_of_the_money_prices(selected_kernels(), m, c, strikes, times, tolerance, to);
    }
    return py::make_tuple(values, error);
}

// A line chosen for this model and these strikes, frozen for re-pricing.
fourier_slice plan_slice(const py::tuple& model, const py::tuple& curve,
                         const py::array& log_moneyness, double maturity, double tolerance) {
    const auto m = to_model(model);
    const auto c = to_curve(curve);
    const auto k = input<double>(log_moneyness, "log_moneyness");
    py::gil_scoped_release release;  // safe: no Python object is touched
    const double variance = effective_variance(selected_kernels(), m, c, maturity);
    if (!(variance > 0.0)) throw std::invalid_argument("the model has no variance to plan for");
    double reach = nearest_reach;
    for (double x : k)
        while (std::abs(x) > reach * std::sqrt(variance)) reach *= 2.0;
    auto found = line_of(selected_kernels(), m, c, maturity, variance, reach, tolerance);
    return fourier_slice(std::move(found.line), k, variance);
}

}  // namespace

void bind_price(py::module_& module) {
    module.def("out_of_the_money_prices", &prices, py::arg("model"), py::arg("curve"),
               py::arg("moneyness"), py::arg("maturities"), py::arg("tolerance"),
               "(prices per unit of forward, largest error estimate).");
    py::class_<fourier_slice>(module, "FourierSlice",
                              "Strikes of one maturity on a frozen Fourier line; immutable.")
        .def(py::init(&plan_slice), py::arg("model"), py::arg("curve"), py::arg("log_moneyness"),
             py::arg("maturity"), py::arg("tolerance"))
        .def_property_readonly("arguments",
                               [](const fourier_slice& slice) {
                                   auto u = owning<complex>(
                                       {static_cast<py::ssize_t>(slice.nodes())});
                                   auto to = output(u);
                                   for (std::size_t j = 0; j < slice.nodes(); ++j)
                                       to[j] = {slice.line().nodes[j], -0.5};
                                   return u;
                               },
                               "u at which the slice wants log phi.")
        .def("prices",
             [](const fourier_slice& slice, const py::array& log_phi) {
                 const auto values = input<complex>(log_phi, "log_phi", slice.nodes());
                 auto out = owning<double>({static_cast<py::ssize_t>(slice.strikes())});
                 slice.prices(values, output(out));
                 return out;
             },
             py::arg("log_phi"), "Out-of-the-money prices per unit of forward.")
        .def("tangents",
             [](const fourier_slice& slice, const py::array& log_phi, const py::array& d_log_phi) {
                 const auto values = input<complex>(log_phi, "log_phi", slice.nodes());
                 const auto changes = input<complex>(d_log_phi, "d_log_phi");
                 if (changes.size() % slice.nodes())
                     throw py::value_error("d_log_phi must have one row per direction and " +
                                           std::to_string(slice.nodes()) + " columns");
                 auto out = owning<double>({static_cast<py::ssize_t>(changes.size() / slice.nodes()),
                                            static_cast<py::ssize_t>(slice.strikes())});
                 slice.tangents(values, changes, output(out));
                 return out;
             },
             py::arg("log_phi"), py::arg("d_log_phi"),
             "Derivatives of the prices along directions of log phi, directions x strikes.");
}

}  // namespace volterra::bindings

// The Black formula and its inverse, element by element over equal-length arrays.
#include "arrays.hpp"
#include "volterra/implied_volatility.hpp"

namespace volterra::bindings {

namespace {

py::array_t<double> price(const py::array& forward, const py::array& strike,
                          const py::array& maturity, const py::array& volatility,
                          const py::array& discount, const py::array& is_call) {
    const auto f = input<double>(forward, "forward");
    const std::size_t n = f.size();
    const auto k = input<double>(strike, "strike", n);
    const auto t = input<double>(maturity, "maturity", n);
    const auto v = input<double>(volatility, "volatility", n);
    const auto d = input<double>(discount, "discount", n);
    const auto c = input<bool>(is_call, "is_call", n);
    auto result = owning<double>({static_cast<py::ssize_t>(n)});
    const auto to = output(result);
    {
        py::gil_scoped_release release;  // safe: only the spans above are touched
        for (std::size_t i = 0; i < n; ++i) to[i] = black_price(f[i], k[i], t[i], v[i], d[i], c[i]);
    }
    return result;
}

py::array_t<double> vega(const py::array& forward, const py::array& strike,
                         const py::array& maturity, const py::array& volatility,
                         const py::array& discount) {
    const auto f = input<double>(forward, "forward");
    const std::size_t n = f.size();
    const auto k = input<double>(strike, "strike", n);
    const auto t = input<double>(maturity, "maturity", n);
    const auto v = input<double>(volatility, "volatility", n);
    const auto d = input<double>(discount, "discount", n);
    auto result = owning<double>({static_cast<py::ssize_t>(n)});
    const auto to = output(result);
    {
        py::gil_scoped_release release;  // safe: only the spans above are touched
        for (std::size_t i = 0; i < n; ++i) to[i] = black_vega(f[i], k[i], t[i], v[i], d[i]);
    }
    return result;
}

py::tuple implied_volatility(const py::array& price, const py::array& forward,
                             const py::array& strike, const py::array& maturity,
                             const py::array& discount, const py::array& is_call) {
    const auto p = input<double>(price, "price");
    const std::size_t n = p.size();
    const auto f = input<double>(forward, "forward", n);
    const auto k = input<double>(strike, "strike", n);
    const auto t = input<double>(maturity, "maturity", n);
    const auto d = input<double>(discount, "discount", n);
    const auto c = input<bool>(is_call, "is_call", n);
    auto volatilities = owning<double>({static_cast<py::ssize_t>(n)});
    auto statuses = owning<std::int8_t>({static_cast<py::ssize_t>(n)});
    const auto to = output(volatilities);
    const auto status = output(statuses);
    {
        py::gil_scoped_release release;  // safe: only the spans above are touched
        for (std::size_t i = 0; i < n; ++i) {
            const auto r = black_implied_volatility(p[i], f[i], k[i], t[i], d[i], c[i]);
            to[i] = r.volatility;
            status[i] = static_cast<std::int8_t>(r.status);
        }
    }
    return py::make_tuple(volatilities, statuses);
}

}  // namespace

void bind_black(py::module_& module) {
    module.def("black_price", &price, py::arg("forward"), py::arg("strike"), py::arg("maturity"),
               py::arg("volatility"), py::arg("discount"), py::arg("is_call"),
               "Discounted Black prices.");
    module.def("black_vega", &vega, py::arg("forward"), py::arg("strike"), py::arg("maturity"),
               py::arg("volatility"), py::arg("discount"),
               "Derivatives of the prices with the volatility.");
    module.def("black_implied_volatility", &implied_volatility, py::arg("price"),
               py::arg("forward"), py::arg("strike"), py::arg("maturity"), py::arg("discount"),
               py::arg("is_call"),
               "(volatilities, status): 0 solved, 1 below intrinsic, 2 at or above the upper "
               "bound, 3 not converged; nan unless solved.");
}

}  // namespace volterra::bindings

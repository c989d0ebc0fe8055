// pyvolterra._core: the table of contents of the bindings.
#include <pybind11/pybind11.h>

namespace volterra::bindings {
void bind_black(pybind11::module_&);
void bind_build_info(pybind11::module_&);
void bind_moments(pybind11::module_&);
void bind_price(pybind11::module_&);
void bind_resolvents(pybind11::module_&);
void bind_sensitivities(pybind11::module_&);
void bind_transform(pybind11::module_&);
}  // namespace volterra::bindings

PYBIND11_MODULE(_core, module) {
    using namespace volterra::bindings;
    module.doc() = "Compiled core of pyvolterra. Arguments are checked and coerced in Python.";
    bind_build_info(module);
    bind_resolvents(module);
    bind_transform(module);
    bind_moments(module);
    bind_sensitivities(module);
    bind_price(module);
    bind_black(module);
}

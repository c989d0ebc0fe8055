// What was built and what this machine uses of it.
#include <pybind11/pybind11.h>
#include <pybind11/stl.h>

#include <string>
#include <vector>

#include "targets.hpp"

namespace py = pybind11;

namespace volterra::bindings {

void bind_build_info(py::module_& module) {
    module.def("build_info", [] {
        std::vector<std::string> available;
        for (auto* kernels = available_kernels(); *kernels; ++kernels)
            available.push_back((*kernels)->name);
        py::dict info;
#if defined(__clang__)
        info["compiler"] = std::string("clang ") + __clang_version__;
#elif defined(__GNUC__)
        info["compiler"] = std::string("g++ ") + __VERSION__;
#endif
        info["cxx_standard"] = static_cast<long>(__cplusplus);
        info["pybind11"] = PYBIND11_TOSTRING(PYBIND11_VERSION_MAJOR) "." PYBIND11_TOSTRING(
            PYBIND11_VERSION_MINOR);
        info["instruction_set"] = selected_kernels().name;
        info["instruction_sets_available"] = available;
        info["adams_lanes"] = selected_kernels().adams_lanes;
        return info;
    }, "Compiler, instruction set chosen and those available, as a dict.");
}

}  // namespace volterra::bindings

"""What pyproject.toml cannot say: the C++ extension and its instruction-set units.

The numerical kernels are compiled once per instruction set into static libraries, each with its
own flags; ``csrc/dispatch/select.cpp`` picks one of them at run time.
"""

import platform
import sys
from pathlib import Path

from pybind11.setup_helpers import ParallelCompile, Pybind11Extension, build_ext
from setuptools import setup

msvc = sys.platform == "win32"
x86 = platform.machine().lower() in {"x86_64", "amd64"}

# No fast-math. -fno-math-errno and -fno-trapping-math change no result: they only allow the
# compiler to inline sqrt and to vectorise selections.
base_flags = (
    ["/O2", "/std:c++20", "/EHsc"]
    if msvc
    else [
        "-O3",
        "-std=c++20",
        "-fvisibility=hidden",
        "-fPIC",
        "-g0",
        "-fno-math-errno",
        "-fno-trapping-math",
    ]
)
if msvc:
    target_flags = {"baseline": [], "avx2": ["/arch:AVX2"], "avx512": ["/arch:AVX512"]}
else:
    target_flags = {
        "baseline": [],
        "avx2": ["-mavx2", "-mfma"],
        "avx512": ["-mavx512f", "-mavx512dq", "-mavx512vl", "-mfma", "-mprefer-vector-width=512"],
    }
if not x86:
    target_flags = {"baseline": []}

headers = sorted(str(p) for p in Path("csrc").rglob("*.hpp"))
include = ["csrc/include", "csrc/dispatch", "csrc/bindings"]


def library(name, sources, flags):
    options = {
        "sources": sources,
        "include_dirs": include,
        "cflags": base_flags + flags,
        "obj_deps": {"": headers},
    }
    return (f"volterra_{name}", options)


libraries = [
    library(target, [f"csrc/dispatch/{target}.cpp"], flags)
    for target, flags in target_flags.items()
]

extension = Pybind11Extension(
    "pyvolterra._core",
    [*sorted(str(p) for p in Path("csrc/bindings").glob("*.cpp")), "csrc/dispatch/select.cpp"],
    include_dirs=include,
    define_macros=[("VOLTERRA_X86_TARGETS", "1" if x86 else "0")],
    extra_compile_args=base_flags,
    depends=headers,
    cxx_std=20,
)


class BuildExtension(build_ext):
    """Builds the static libraries first, also when only build_ext was asked for."""

    def run(self):
        self.run_command("build_clib")
        super().run()


ParallelCompile("PYVOLTERRA_BUILD_JOBS").install()
setup(libraries=libraries, ext_modules=[extension], cmdclass={"build_ext": BuildExtension})

"""Transforms, prices and calibration for affine Volterra stochastic-volatility models.

Model prices can mislead: see the cautions in the README before relying on any number.
"""

from importlib import import_module as _import_module
from typing import TYPE_CHECKING, Any

try:  # by its name: `from . import` reports a missing module as a circular import
    _import_module(f"{__name__}._core")
except ModuleNotFoundError as error:
    if error.name != f"{__name__}._core":
        raise
    raise ImportError(
        f"pyvolterra was imported from {__path__[0]}, which has no compiled core for this Python. "
        "In a source checkout run `pip install .` and start Python from another folder (started "
        "there, it takes the sources first), or build in place: "
        "`python setup.py build_ext --inplace`"
    ) from None

from . import black
from ._version import __version__
from .errors import AccuracyWarning, MissingDependencyError, MomentExplosionError, QuoteError
from .forward_variance import ForwardVariance
from .kernels import ConstantKernel, FractionalKernel
from .model import VolterraHeston
from .quotes import Quotes, read_quotes
from .sensitivities import TransformSensitivities
from .threads import default_threads, set_default_threads
from .transform import TransformInfo

if TYPE_CHECKING:
    from .calibration import Fit, calibrate

__all__ = [
    "AccuracyWarning",
    "ConstantKernel",
    "Fit",
    "ForwardVariance",
    "FractionalKernel",
    "MissingDependencyError",
    "MomentExplosionError",
    "QuoteError",
    "Quotes",
    "TransformInfo",
    "TransformSensitivities",
    "VolterraHeston",
    "__version__",
    "black",
    "calibrate",
    "default_threads",
    "read_quotes",
    "set_default_threads",
]


def __getattr__(name: str) -> Any:
    # The fit needs scipy.optimize, which is slow to import: only when it is asked for.
    if name in {"calibrate", "Fit"}:
        from . import calibration

        return getattr(calibration, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")

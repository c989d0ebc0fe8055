"""Transforms, prices and calibration for affine Volterra stochastic-volatility models.

Model prices can mislead: see the cautions in the README before relying on any number.
"""

from typing import TYPE_CHECKING, Any

try:
    from . import _core as _core
except ImportError as error:  # a source checkout on the path hides the installed package
    raise ImportError(
        f"the compiled core of pyvolterra could not be loaded from {__path__[0]} ({error}); "
        "in a source checkout run `pip install .` and start Python from another folder, or build "
        "in place with `python setup.py build_ext --inplace`"
    ) from error

from . import black
from ._version import __version__
from .errors import AccuracyWarning, MissingDependencyError, MomentExplosionError, QuoteError
from .forward_variance import ForwardVariance
from .kernels import ConstantKernel, FractionalKernel
from .model import TransformInfo, VolterraHeston
from .quotes import Quotes, read_quotes
from .threads import default_threads, set_default_threads

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

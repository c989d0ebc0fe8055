"""Transforms, prices and calibration for affine Volterra stochastic-volatility models.

Model prices can mislead: see the cautions in the README before relying on any number.
"""

from typing import TYPE_CHECKING, Any

from . import black
from ._version import __version__
from .errors import AccuracyWarning, MissingDependencyError, MomentExplosionError, QuoteError
from .forward_variance import ForwardVariance
from .kernels import ConstantKernel, FractionalKernel
from .model import TransformInfo, VolterraHeston
from .quotes import Quotes, read_quotes

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
    "read_quotes",
]


def __getattr__(name: str) -> Any:
    # The fit needs scipy.optimize, which is slow to import: only when it is asked for.
    if name in {"calibrate", "Fit"}:
        from . import calibration

        return getattr(calibration, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")

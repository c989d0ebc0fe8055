"""The log-transform of a model: arguments checked, the core called, warnings given."""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from . import _core
from ._accuracy import warn_of_accuracy
from ._validation import (
    fourier_arguments,
    positive_integer,
    positive_maturities,
    positive_number,
)
from .threads import default_threads

if TYPE_CHECKING:
    from .model import VolterraHeston

SCHEMES = ("auto", "graded", "adams")
MOST_STEPS = 100_000


@dataclass(frozen=True)
class TransformInfo:
    """What ``full_output=True`` adds to a transform.

    Attributes
    ----------
    error_estimate : ndarray of float64, the shape of the values
        Estimated absolute error of the characteristic function.
    scheme : str
        The scheme used: ``"closed form"``, ``"graded"`` or ``"adams"``.
    """

    error_estimate: Any
    scheme: str


def log_transform(
    model: "VolterraHeston",
    u: ArrayLike,
    maturities: ArrayLike,
    tolerance: float,
    scheme: str,
    steps: int | None,
    threads: int | None,
    full_output: bool,
) -> Any:
    """See :meth:`pyvolterra.VolterraHeston.log_characteristic_function`."""
    nodes = fourier_arguments(u)
    times = positive_maturities(maturities, dimensions=1)
    bound = positive_number(tolerance, "tolerance")
    if scheme not in SCHEMES:
        raise ValueError(f"scheme must be one of {', '.join(SCHEMES)}, got {scheme!r}")
    if steps is not None and scheme != "adams":
        raise ValueError("steps needs scheme='adams'")
    count = 0 if steps is None else positive_integer(steps, "steps")
    if count > MOST_STEPS:
        raise ValueError(f"steps must be at most {MOST_STEPS}, got {count}")
    workers = default_threads() if threads is None else positive_integer(threads, "threads")
    values, errors, worst = _core.log_transform(
        model._core_model,
        model.forward_variance._arguments,
        np.ascontiguousarray(nodes.ravel()),
        np.ascontiguousarray(times.ravel()),
        scheme,
        count,
        bound,
        workers,
        full_output,
    )
    if steps is None and not worst <= 1.0:
        warn_of_accuracy(
            f"tolerance {bound:.1e} not met: estimated error {worst * bound:.1e} of the "
            "characteristic function relative to its value at i Im u" + _doubt_of_curve(model)
        )
    shape = times.shape + nodes.shape
    result: Any = values.reshape(shape) if shape else complex(values[0, 0])
    if not full_output:
        return result
    estimate = errors.reshape(shape) if shape else float(errors[0, 0])
    return result, TransformInfo(estimate, _scheme_used(model, scheme))


def _doubt_of_curve(model: "VolterraHeston") -> str:
    """What a warning says about a curve that the model cannot have."""
    if model.forward_variance.is_admissible(model.kernel):
        return ""
    return (
        "; the forward-variance curve falls faster than the model allows (its variance would "
        "become negative), so that the characteristic function may be larger than 1"
    )


def _scheme_used(model: "VolterraHeston", scheme: str) -> str:
    if scheme != "auto":
        return scheme
    return "closed form" if model.kernel.hurst == 0.5 else "graded"

"""Derivatives of the log-transform with respect to the parameters of the model."""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

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

PARAMETERS = ("hurst", "vol_of_vol", "correlation", "mean_reversion")
CURVE_PARAMETERS = ("initial_variance", "forward_variance")


@dataclass(frozen=True, eq=False)
class TransformSensitivities:
    """The log-transform and its derivatives.

    Attributes
    ----------
    values : complex or ndarray of complex128
        log E[exp(iuX_T)], of the shape of
        :meth:`~pyvolterra.VolterraHeston.log_characteristic_function`.
    derivatives : dict of str to complex or ndarray of complex128
        By parameter, in the order asked for, each of the shape of ``values``;
        ``"forward_variance"`` has one more axis in front, the levels of the curve.
    """

    values: Any
    derivatives: dict[str, Any]

    def __getitem__(self, parameter: str) -> Any:
        """The derivative with respect to ``parameter``."""
        return self.derivatives[parameter]


def transform_sensitivities(
    model: "VolterraHeston",
    u: ArrayLike,
    maturities: ArrayLike,
    parameters: Iterable[str] | None,
    tolerance: float,
    threads: int | None,
) -> TransformSensitivities:
    """See :meth:`pyvolterra.VolterraHeston.transform_sensitivities`."""
    nodes = fourier_arguments(u)
    times = positive_maturities(maturities, dimensions=1)
    bound = positive_number(tolerance, "tolerance")
    driven = model.forward_variance.form == "driven"
    names = _names(parameters, driven)
    workers = default_threads() if threads is None else positive_integer(threads, "threads")

    ascending, rows = np.unique(times.ravel(), return_inverse=True)
    wanted = tuple(name in names for name in PARAMETERS)
    of_curve = any(name in names for name in CURVE_PARAMETERS)
    values, by_parameter, by_curve, missed = _core.transform_sensitivities(
        model._core_model,
        model.forward_variance._arguments,
        np.ascontiguousarray(nodes.ravel()),
        ascending,
        (*wanted, of_curve),
        bound,
        workers,
    )
    if missed:
        warn_of_accuracy(
            f"tolerance {bound:.1e} not met at {missed} u; where no mesh gave a solution the "
            "result is nan"
        )

    def shaped(array: NDArray[np.complex128]) -> Any:
        if not np.array_equal(ascending, times.ravel()):
            array = array[..., rows, :]
        array = array.reshape(array.shape[:-2] + times.shape + nodes.shape)
        return array if array.ndim else complex(array)

    found = dict(zip(np.compress(wanted, PARAMETERS).tolist(), by_parameter, strict=True))
    if of_curve:
        found["forward_variance"] = by_curve[1:] if driven else by_curve
        if driven:
            found["initial_variance"] = by_curve[0]
    return TransformSensitivities(shaped(values), {name: shaped(found[name]) for name in names})


def _names(parameters: Iterable[str] | None, driven: bool) -> tuple[str, ...]:
    known = (*PARAMETERS, *CURVE_PARAMETERS) if driven else (*PARAMETERS, "forward_variance")
    if parameters is None:
        return known
    if isinstance(parameters, str):
        raise TypeError(f"parameters must be an iterable of names, got the string {parameters!r}")
    names = tuple(parameters)
    for name in names:
        if name not in known:
            form = "driven" if driven else "market"
            raise ValueError(
                f"parameters must be among {', '.join(known)} for a {form} curve, got {name!r}"
            )
    if len(set(names)) != len(names):
        raise ValueError(f"parameters must not repeat a name, got {names}")
    return names

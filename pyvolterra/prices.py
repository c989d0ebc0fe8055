"""Prices and implied volatilities: arguments checked, the core called, warnings given."""

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from . import _core, black
from ._accuracy import warn_of_accuracy
from ._validation import booleans, broadcast, positive_number, positive_reals, require

if TYPE_CHECKING:
    from .model import VolterraHeston


def price(
    model: "VolterraHeston",
    strikes: ArrayLike,
    maturities: ArrayLike,
    forward: ArrayLike,
    discount: ArrayLike,
    call: ArrayLike,
    tolerance: float,
) -> Any:
    """See :meth:`pyvolterra.VolterraHeston.price`."""
    k, t, f, d = positive_reals(
        strikes=strikes, maturities=maturities, forward=forward, discount=discount
    )
    k, t, f, d, is_call = broadcast(
        strikes=k, maturities=t, forward=f, discount=d, call=booleans(call, "call")
    )
    otm = f * _out_of_the_money(model, k, t, f, positive_number(tolerance, "tolerance"))
    intrinsic = np.where(is_call, f - k, k - f)
    result = d * (otm + np.maximum(intrinsic, 0.0))
    return float(result) if result.ndim == 0 else result


def implied_volatility(
    model: "VolterraHeston",
    strikes: ArrayLike,
    maturities: ArrayLike,
    forward: ArrayLike,
    tolerance: float,
) -> Any:
    """See :meth:`pyvolterra.VolterraHeston.implied_volatility`."""
    bound = positive_number(tolerance, "tolerance")
    k, t, f = positive_reals(strikes=strikes, maturities=maturities, forward=forward)
    k, t, f = broadcast(strikes=k, maturities=t, forward=f)
    otm = _out_of_the_money(model, k, t, f, bound)
    otm = np.where(otm > bound, otm, -1.0)
    result = black.implied_volatility(otm, 1.0, k / f, t, call=k >= f, errors="nan")
    return float(result) if np.ndim(result) == 0 else result


def _out_of_the_money(
    model: "VolterraHeston",
    strikes: NDArray[np.float64],
    maturities: NDArray[np.float64],
    forward: NDArray[np.float64],
    tolerance: float,
) -> NDArray[np.float64]:
    # Prices per unit of forward: calls where strike >= forward.
    with np.errstate(over="ignore", under="ignore"):
        moneyness = strikes / forward
    fine = (moneyness > 0.0) & (moneyness < np.inf)
    require(fine, moneyness, "strikes / forward", "a positive finite number")
    prices, error = _core.out_of_the_money_prices(
        model._core_model,
        model.forward_variance._arguments,
        np.ascontiguousarray(moneyness.ravel()),
        np.ascontiguousarray(maturities.ravel()),
        tolerance,
    )
    if not error <= tolerance:
        warn_of_accuracy(
            f"tolerance {tolerance:.1e} not met: estimated price error {error:.1e} per unit of "
            "forward"
        )
    return prices.reshape(strikes.shape)

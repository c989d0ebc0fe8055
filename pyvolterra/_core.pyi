"""Types of the compiled core. Arguments are coerced and checked by the Python modules."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

_Floats = NDArray[np.float64]
_Complexes = NDArray[np.complex128]
_Model = tuple[float, float, float, float]
_Curve = tuple[bool, float, _Floats, _Floats]

def build_info() -> dict[str, Any]: ...
def mittag_leffler_kernel(alpha: float, beta: float, rate: float, t: _Floats) -> _Floats: ...
def log_transform(
    model: _Model,
    curve: _Curve,
    u: _Complexes,
    maturities: _Floats,
    scheme: str,
    steps: int,
    tolerance: float,
    threads: int = 1,
    estimate: bool = True,
) -> tuple[_Complexes, _Floats, float]: ...
def transform_sensitivities(
    model: _Model,
    curve: _Curve,
    u: _Complexes,
    maturities: _Floats,
    wanted: tuple[bool, ...],
    tolerance: float,
    threads: int = 1,
) -> tuple[_Complexes, _Complexes, _Complexes, int]: ...
def adams_solution(
    model: _Model, u: _Complexes, horizon: float, steps: int, instruction_set: str = ""
) -> _Complexes: ...
def basis_transform(
    model: _Model,
    curve: _Curve,
    u: _Complexes,
    maturity: float,
    steps: int,
    instruction_set: str = "",
) -> _Complexes: ...
def explosion_time(model: _Model, moment: float) -> float: ...
def moment_strip(model: _Model, maturity: float) -> tuple[float, float]: ...
def out_of_the_money_prices(
    model: _Model, curve: _Curve, moneyness: _Floats, maturities: _Floats, tolerance: float
) -> tuple[_Floats, float]: ...

class FourierSlice:
    def __init__(
        self,
        model: _Model,
        curve: _Curve,
        log_moneyness: _Floats,
        maturity: float,
        tolerance: float,
    ) -> None: ...
    @property
    def arguments(self) -> _Complexes: ...
    def prices(self, log_phi: _Complexes) -> _Floats: ...
    def tangents(self, log_phi: _Complexes, d_log_phi: _Complexes) -> _Floats: ...

def black_price(
    forward: _Floats,
    strike: _Floats,
    maturity: _Floats,
    volatility: _Floats,
    discount: _Floats,
    is_call: NDArray[np.bool_],
) -> _Floats: ...
def black_vega(
    forward: _Floats,
    strike: _Floats,
    maturity: _Floats,
    volatility: _Floats,
    discount: _Floats,
) -> _Floats: ...
def black_implied_volatility(
    price: _Floats,
    forward: _Floats,
    strike: _Floats,
    maturity: _Floats,
    discount: _Floats,
    is_call: NDArray[np.bool_],
) -> tuple[_Floats, NDArray[np.int8]]: ...

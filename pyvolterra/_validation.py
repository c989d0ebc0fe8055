"""Argument checks shared by the public modules: each failure names the argument and the rule."""

import numbers
from typing import Any

import numpy as np
from numpy.typing import NDArray


def finite_number(value: object, name: str) -> float:
    """A finite real scalar as a float."""
    if isinstance(value, np.ndarray) and value.ndim == 0:
        value = value[()]
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Real):
        raise TypeError(f"{name} must be a real number, got {type(value).__name__}")
    number = float(value)
    if not np.isfinite(number):
        raise ValueError(f"{name} must be finite, got {number}")
    return number


def positive_integer(value: object, name: str) -> int:
    """An integer of at least 1."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, (int, np.integer)):
        raise TypeError(f"{name} must be an integer, got {type(value).__name__}")
    if value < 1:
        raise ValueError(f"{name} must be at least 1, got {value}")
    return int(value)


def _as_array(value: object, name: str, dtype: type) -> NDArray[Any]:
    array = np.asarray(value)
    allowed = "iufc" if dtype is complex else "iuf"
    if array.dtype.kind not in allowed:
        kind = "complex or real" if dtype is complex else "real"
        raise TypeError(f"{name} must hold {kind} numbers, got dtype {array.dtype}")
    array = array.astype(dtype)
    finite = np.isfinite(array)
    if not finite.all():
        where = tuple(int(i) for i in np.argwhere(~finite)[0])
        at = f"{name}[{', '.join(map(str, where))}]" if where else name
        raise ValueError(f"{at} must be finite, got {array[where]}")
    return array


def finite_reals(value: object, name: str) -> NDArray[np.float64]:
    """An array of finite reals of any shape, copied to float64."""
    return _as_array(value, name, float)


def finite_complex(value: object, name: str) -> NDArray[np.complex128]:
    """An array of finite complex numbers of any shape, copied to complex128."""
    return _as_array(value, name, complex)


def require(condition: NDArray[np.bool_], values: NDArray[Any], name: str, rule: str) -> None:
    """Raise ValueError naming the first element of ``values`` where ``condition`` fails."""
    if condition.all():
        return
    where = tuple(int(i) for i in np.argwhere(~condition)[0])
    at = f"{name}[{', '.join(map(str, where))}]" if where else name
    raise ValueError(f"{at} must be {rule}, got {values[where]}")


def positive_number(value: object, name: str) -> float:
    """A finite real scalar above zero."""
    number = finite_number(value, name)
    if number <= 0.0:
        raise ValueError(f"{name} must be positive, got {number}")
    return number


LARGEST_ARGUMENT = 1e8
"""Largest modulus of a Fourier argument."""

LONGEST_MATURITY = 1000.0
"""Years."""


def _at_most_1d(array: NDArray[Any], name: str) -> None:
    if array.ndim > 1:
        raise ValueError(f"{name} must be a scalar or one-dimensional, got {array.shape}")


def fourier_arguments(value: object) -> NDArray[np.complex128]:
    """Arguments u of a transform."""
    array = finite_complex(value, "u")
    _at_most_1d(array, "u")
    size = np.maximum(abs(array.real), abs(array.imag))
    require(size <= LARGEST_ARGUMENT, array, "u", f"at most {LARGEST_ARGUMENT:.0e} in modulus")
    return array


def positive_maturities(value: object, dimensions: int | None = None) -> NDArray[np.float64]:
    """Maturities in years; with ``dimensions=1`` a scalar or one-dimensional."""
    array = finite_reals(value, "maturities")
    if dimensions == 1:
        _at_most_1d(array, "maturities")
    require(array > 0.0, array, "maturities", "positive")
    require(array <= LONGEST_MATURITY, array, "maturities", f"at most {LONGEST_MATURITY:.0f} years")
    return array


def positive_array(value: object, name: str) -> NDArray[np.float64]:
    """Finite reals above zero."""
    array = finite_reals(value, name)
    require(array > 0.0, array, name, "positive")
    return array


def nonnegative_array(value: object, name: str) -> NDArray[np.float64]:
    """Finite reals, zero or above."""
    array = finite_reals(value, name)
    require(array >= 0.0, array, name, "zero or positive")
    return array


def booleans(value: object, name: str) -> NDArray[np.bool_]:
    """Whether each option is a call."""
    array = np.asarray(value)
    if array.dtype != np.bool_:
        raise TypeError(f"{name} must hold booleans (True for a call), got dtype {array.dtype}")
    return array


def positive_reals(**arguments: object) -> tuple[NDArray[np.float64], ...]:
    """Positive arrays by name, the maturities within their limit."""
    return tuple(
        positive_maturities(value) if name == "maturities" else positive_array(value, name)
        for name, value in arguments.items()
    )


def broadcast(**arguments: NDArray[Any]) -> tuple[NDArray[Any], ...]:
    """The arrays broadcast against each other; a ValueError names all shapes if they do not."""
    try:
        return tuple(np.broadcast_arrays(*arguments.values()))
    except ValueError:
        shapes = ", ".join(f"{name} {array.shape}" for name, array in arguments.items())
        raise ValueError(f"shapes do not broadcast: {shapes}") from None

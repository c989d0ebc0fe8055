"""Sums of power series by diagonal Padé approximants, with a certificate.

Source: On a device for computing the e_m(S_n) transformation, Math. Tables Aids Comput. 10, 1956
(memory).
"""

from collections.abc import Callable, Iterator
from typing import Any, NamedTuple

FEWEST = 16  # before the first test
AGREEING = 5  # approximants that must agree with the last, or a sixth of all if that is more


class UncertifiedError(ArithmeticError):
    """The oracle cannot vouch for the digits asked for."""


class Certified(NamedTuple):
    """A value and a bound of its absolute error, by agreement and not by proof.

    Attributes
    ----------
    value : mpmath.mpc or mpmath.mpf
    error : float
    """

    value: Any
    error: float


class _Pade:
    """Diagonal approximants of a sum given term by term: the epsilon algorithm.

    e(k+1, n) = e(k-1, n+1) + 1/(e(k, n+1) - e(k, n)), with the partial sums as e(0, n); an
    ascending diagonal at a time. Its even columns are approximants: equal neighbours there mean
    convergence to the last bit.
    """

    def __init__(self, mp: Any) -> None:
        self._mp = mp
        self._sum = mp.mpc(0)
        self._diagonal: list[Any] = []
        self._present = 0
        self._converged = False
        self.approximants: list[Any] = []

    def add(self, term: Any) -> None:
        # Powers that are missing throughout (c1 = 0) leave a series in x^2: skip them.
        if term == 0 or self._converged:
            return
        self._sum += term
        self._present += 1
        previous, fresh = self._mp.mpc(0), [self._sum]
        for column, old in enumerate(self._diagonal):
            difference = fresh[-1] - old
            if difference == 0:
                if column % 2 == 0:
                    self._converged = True
                    self.approximants.append(old)
                    return
                difference = self._mp.eps * old
            fresh.append(previous + 1 / difference)
            previous = old
        self._diagonal = fresh
        if len(fresh) % 2 == 1:
            self.approximants.append(fresh[-1])

    def value_and_spread(self) -> tuple[Any, Any]:
        """The last approximant and its largest distance from the AGREEING before it.

        Convergence is at worst geometric. The span grows with the order, so that the error left is
        well below the distance however slow the rate.
        """
        if self._converged:
            return self.approximants[-1], 0
        if self._present < 4:  # of FEWEST or more terms: a polynomial (c0 = 0, or c1 = c2 = 0)
            return self._sum, 0
        if len(self.approximants) <= AGREEING:
            return self._sum, self._mp.inf
        value = self.approximants[-1]
        span = max(AGREEING, len(self.approximants) // 6)
        return value, max(abs(value - other) for other in self.approximants[-1 - span : -1])


def certified_sum(
    mp: Any,
    series: Callable[[], Iterator[list[Any]]],
    digits: int,
    terms: int,
    loosening: Callable[[Any], Any],
) -> Certified:
    """Add up several power series by their Padé approximants, until orders and precisions agree.

    ``loosening(value)`` multiplies the tolerance 10^-digits, to 0.5 at most.
    """
    values, error = [], mp.mpf(0)
    for dps in (digits + terms + terms // 2, digits + terms):
        with mp.workdps(dps):
            value, spread = _accelerated(mp, series(), digits, loosening)
            values.append(value)
            error = max(error, spread)
    error = 2 * (error + abs(values[1] - values[0]))
    limit = _tolerance(mp, digits, loosening(values[0]))
    if not error <= limit:
        raise UncertifiedError(
            f"{terms} terms vouch for {float(error):.1e} only, not for {float(limit):.1e}"
        )
    return Certified(values[0], float(error))


def _accelerated(
    mp: Any, series: Iterator[list[Any]], digits: int, loosening: Callable[[Any], Any]
) -> tuple[Any, Any]:
    sums: list[_Pade] = []
    value, spread = mp.mpc(0), mp.inf
    for count, terms in enumerate(series):
        sums = sums or [_Pade(mp) for _ in terms]
        for total, term in zip(sums, terms, strict=True):
            total.add(term)
        if count >= FEWEST and count % 4 == 0:
            parts = [total.value_and_spread() for total in sums]
            value, spread = mp.fsum(p[0] for p in parts), mp.fsum(p[1] for p in parts)
            if 8 * spread <= _tolerance(mp, digits, loosening(value)):
                break
    return value, spread


def _tolerance(mp: Any, digits: int, factor: Any) -> Any:
    return min(mp.mpf(10) ** (-digits) * factor, mp.mpf("0.5"))

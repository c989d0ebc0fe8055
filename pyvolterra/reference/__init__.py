"""Slow, plain, direct oracles for the tests and the benchmarks.

They share no code with the rest of the package: NumPy and SciPy alone, and mpmath (needed by
the tests only) in :mod:`oracle`, :mod:`mittag_leffler`, :mod:`explosion` and the functions with a
name in ``_mp``.

========================  ==================================================================
:mod:`adams`              fractional Adams schemes on a uniform mesh
:mod:`classical`          closed form at hurst 1/2
:mod:`oracle`             power series summed by Padé approximants; prices by quadrature
:mod:`mittag_leffler`     Mittag-Leffler functions, mean of the variance
:mod:`explosion`          explosion times of the rough model from the power series
========================  ==================================================================

``log_transform`` of :mod:`classical` and :mod:`oracle` and ``adams.log_transform_adams`` take the
same curves.
"""

from . import adams, classical, explosion, mittag_leffler, oracle

__all__ = ["adams", "classical", "explosion", "mittag_leffler", "oracle"]

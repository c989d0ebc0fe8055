"""Kernels: values, and one clear error for each bad argument."""

import math

import numpy as np
import pytest

import pyvolterra as pv


def test_fractional_kernel_value():
    kernel = pv.FractionalKernel(hurst=0.12)
    assert kernel.alpha == 0.62
    np.testing.assert_allclose(
        kernel([0.25, 1.0]), [0.25**-0.38 / math.gamma(0.62), 1.0 / math.gamma(0.62)], rtol=1e-15
    )


def test_constant_kernel_is_the_fractional_one_at_one_half():
    t = np.array([0.1, 1.0, 7.0])
    np.testing.assert_array_equal(pv.ConstantKernel()(t), pv.FractionalKernel(0.5)(t))


@pytest.mark.parametrize("hurst", [0.0, -0.1, 0.51, 1.0, math.nan, math.inf])
def test_hurst_outside_its_range(hurst):
    with pytest.raises(ValueError, match="hurst must"):
        pv.FractionalKernel(hurst)


@pytest.mark.parametrize("hurst", ["0.1", None, 0.1j, [0.1], True])
def test_hurst_of_a_wrong_type(hurst):
    with pytest.raises(TypeError, match="hurst must be a real number"):
        pv.FractionalKernel(hurst)


@pytest.mark.parametrize("kernel", [pv.FractionalKernel(0.1), pv.ConstantKernel()])
def test_bad_times(kernel):
    with pytest.raises(ValueError, match=r"t\[1\] must be non-negative, got -1.0"):
        kernel([0.5, -1.0])
    with pytest.raises(ValueError, match="t must be finite, got nan"):
        kernel(math.nan)
    with pytest.raises(TypeError, match="t must hold real numbers"):
        kernel("a")

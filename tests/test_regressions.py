"""Once wrong, never again: each case failed in an earlier version."""

import numpy as np
import pytest
from flat_models import flat_model


@pytest.mark.parametrize("seed", range(40))
def test_price_quadrature_does_not_miss(seed):
    """A quadrature error hidden between the strikes of the call: prices depend on no companion and
    agree with a tolerance a thousand times smaller.
    """
    rng = np.random.default_rng(seed)
    level = np.exp(rng.uniform(np.log(0.005), np.log(0.2)))
    model = flat_model(
        rng.uniform(0.02, 0.5), rng.uniform(0.1, 1.5), rng.uniform(-0.95, 0.3), level
    )
    maturity = float(np.exp(rng.uniform(np.log(3 / 365), np.log(3.0))))
    width = np.sqrt(level * maturity)
    strikes = np.exp(rng.uniform(-4.0, 3.0, 6) * width)
    prices = model.price(strikes, maturity, tolerance=1e-7)
    fine = model.price(strikes, maturity, tolerance=1e-10)
    assert np.abs(prices - fine).max() <= 1e-7
    for strike, price in zip(strikes, prices, strict=True):
        assert model.price(strike, maturity, tolerance=1e-7) == price


@pytest.mark.parametrize("maturity", [1e-6, 1e-3, 1.0, 30.0])
def test_closed_form_without_variance_of_variance(maturity):
    """hurst 1/2, vol_of_vol 0, no mean reversion: X is Gaussian (exact)."""
    u = np.array([0.3, 5.0, 40.0, 40.0 - 0.5j])
    value = flat_model(0.5, 0.0, 0.0).log_characteristic_function(u, maturity)
    exact = -0.5 * (u * u + 1j * u) * 0.04 * maturity
    assert np.abs(value - exact).max() <= 1e-13 * np.abs(exact).max()


@pytest.mark.parametrize("steps", [4, 16, 64, 256])
def test_adams_estimate_where_the_mesh_resolves_nothing(steps):
    u = np.array([5.0, 50.0, 500.0, 2000.0])
    model = flat_model(0.08, 0.6, -0.8)
    value, info = model.characteristic_function(
        u, 2.0, scheme="adams", steps=steps, full_output=True
    )
    exact = model.characteristic_function(u, 2.0, tolerance=1e-11, scheme="graded")
    assert np.all(np.abs(value - exact) <= info.error_estimate)


def test_modulus_that_rises_again_with_maturity():
    """|phi| falls to exp(-24) within days and is back at exp(-8) after months: no maturity may be
    given up early.
    """
    model = flat_model(0.484657, 0.648368, -0.989806, 0.0999215)
    times = [0.0039, 0.0347, 0.329, 0.545]
    u = np.array([386.0, 559.0, 666.0]) - 0.5j * np.array([1.0, 1.0, 0.0]) + 1e-9j
    exact = model.characteristic_function(u, times, tolerance=1e-12, full_output=True)[0]
    assert abs(exact[-1, 0]) > 1e-4 > 1e-9 > abs(exact[0, 0])
    for tolerance in (1e-6, 1e-8):
        value = model.characteristic_function(u, times, tolerance=tolerance)
        assert np.abs(value - exact).max() <= tolerance

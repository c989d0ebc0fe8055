"""The uniform scheme in C++ against the plain NumPy reference at equal steps."""

import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra import _core
from pyvolterra.reference.adams import log_transform_adams, riccati_adams

INSTRUCTION_SETS = _core.build_info()["instruction_sets_available"]
CASES = [  # hurst, vol_of_vol, correlation, mean_reversion, horizon
    (0.12, 0.331, -0.681, 0.1, 1.0),
    (0.05, 0.9, -0.9, 0.0, 0.01),
    (0.3, 1.0, 0.3, 1.0, 5.0),
    (0.5, 0.6, -0.7, 1.0, 2.0),
    (0.1, 0.0, 0.0, 0.5, 1.0),
]
U = np.concatenate([np.linspace(0.0, 200.0, 37), np.linspace(0.0, 50.0, 9) - 0.5j])


@pytest.mark.parametrize("instruction_set", INSTRUCTION_SETS)
@pytest.mark.parametrize("steps", [1, 2, 15, 16, 17, 100, 333])
@pytest.mark.parametrize("case", CASES)
def test_equals_the_reference(case, steps, instruction_set):
    hurst, nu, rho, reversion, horizon = case
    psi = _core.adams_solution((hurst, nu, rho, reversion), U + 0j, horizon, steps, instruction_set)
    c0, c1 = -0.5 * (U**2 + 1j * U), 1j * U * rho * nu - reversion
    _, expected, _ = riccati_adams(hurst, c0, c1, 0.5 * nu**2, horizon, steps)
    scale = np.maximum(1.0, np.abs(expected).max(axis=0))
    assert np.max(np.abs(psi - expected) / scale) < 1e-12


@pytest.mark.parametrize("hurst", [0.08, 0.5])
def test_log_transform_equals_the_reference(hurst):
    kernel = pv.FractionalKernel(hurst)
    times, levels = [0.1, 0.45, 1.0], [0.02, 0.05, 0.03]
    reversion = 0.4
    market = pv.ForwardVariance.piecewise_constant(times, levels)
    driven = pv.ForwardVariance.driven(kernel, 0.03, times, levels, reversion)
    for curve, arguments in (
        (market, {"variance_times": times, "variance_levels": levels}),
        (driven, {"initial_variance": 0.03, "drive_times": times, "drive_levels": levels}),
    ):
        model = pv.VolterraHeston(kernel, 0.5, -0.6, curve, reversion)
        for maturity in (0.07, 0.8, 2.0):
            value = model.log_characteristic_function(U, maturity, scheme="adams", steps=100)
            expected = log_transform_adams(
                U,
                maturity,
                100,
                hurst=hurst,
                vol_of_vol=0.5,
                correlation=-0.6,
                mean_reversion=reversion,
                **arguments,
            )
            np.testing.assert_allclose(value, expected, rtol=1e-12, atol=1e-12)


def test_instruction_sets_agree():
    model, curve = (0.1, 0.4, -0.7, 0.0), (True, 0.04, np.array([1.0]), np.array([0.02]))
    values = [
        _core.basis_transform(model, curve, U + 0j, 1.0, 200, name) for name in INSTRUCTION_SETS
    ]
    for value in values[1:]:
        np.testing.assert_allclose(value, values[0], rtol=1e-12, atol=1e-13)


def test_the_implicit_corrector_stays_stable_where_an_explicit_predictor_overflows():
    model = pv.VolterraHeston(
        pv.FractionalKernel(0.12), 0.331, -0.681, pv.ForwardVariance.flat(0.04)
    )
    u = np.array([100.0, 1000.0, 3000.0])
    coarse = model.characteristic_function(u, 1.0, scheme="adams", steps=50)
    assert np.all(np.isfinite(coarse))
    assert np.all(np.abs(coarse) <= 1.0)

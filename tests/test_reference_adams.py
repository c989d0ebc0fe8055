"""The plain Adams schemes against published tables, the power-series oracle and the closed form."""

import math

import mpmath
import numpy as np
import pytest

from pyvolterra.reference import classical, oracle
from pyvolterra.reference.adams import (
    corrector_weights,
    fractional_adams,
    log_transform_adams,
    riccati_adams,
)

ROUGH = {"hurst": 0.12, "vol_of_vol": 0.331, "correlation": -0.681, "mean_reversion": 0.1}
DRIVEN = {"initial_variance": 0.0392, "drive_times": [0.1, 0.45], "drive_levels": [0.02, 0.05]}
MARKET = {"variance_times": [0.1, 0.45, 0.6], "variance_levels": [0.02, 0.05, 0.03]}
U = np.array([0.0, 0.7, 3.0, 8.0, 2.0 - 0.5j, 10.0 - 0.5j])


def aitken(coarse, middle, fine):
    """Limit of a sequence with geometric error, for steps doubled twice."""
    second = fine - 2.0 * middle + coarse
    return np.where(second == 0.0, fine, fine - (fine - middle) ** 2 / (second + (second == 0.0)))


@pytest.mark.parametrize("alpha", [0.52, 0.62, 1.0, 1.25, 1.8])
def test_corrector_weights_do_not_cancel(alpha):
    steps = 400
    first, lagged = corrector_weights(alpha, steps)
    with mpmath.workdps(50):
        p = mpmath.mpf(alpha) + 1
        for n in (1, 2, 3, 4, 5, 17, steps):
            a0 = (n - 1) ** p - (n - p) * mpmath.mpf(n) ** (p - 1)
            assert first[n] == pytest.approx(float(a0), rel=1e-14)
            a = (n + 1) ** p - 2 * mpmath.mpf(n) ** p + (n - 1) ** p
            assert lagged[n] == pytest.approx(float(a), rel=1e-14)
    # constants are integrated exactly
    assert first[steps] + lagged[:steps].sum() == pytest.approx(
        (alpha + 1.0) * steps**alpha, rel=1e-13
    )


@pytest.mark.parametrize(
    ("alpha", "errors"),
    [
        (0.25, ["-2.50e-01", "-1.81e-02", "-3.61e-03", "-1.45e-03", "-6.58e-04", "-2.97e-04"]),
        (1.25, ["5.53e-03", "1.59e-03", "4.33e-04", "1.14e-04", "2.97e-05", "7.66e-06"]),
    ],
)
def test_published_error_table(alpha, errors):
    # Detailed error analysis for a fractional Adams method, Numer. Algorithms 36, 2004: error at
    # x = 1 for steps 1/10 ... 1/320 (memory, reproduced).
    def right_hand_side(x, y):
        return (
            40320.0 / math.gamma(9.0 - alpha) * x ** (8.0 - alpha)
            - 3.0 * math.gamma(5.0 + alpha / 2) / math.gamma(5.0 - alpha / 2) * x ** (4 - alpha / 2)
            + 2.25 * math.gamma(alpha + 1.0)
            + (1.5 * x ** (alpha / 2) - x**4) ** 3
            - abs(y) ** 1.5
        )

    exact = 1.0 - 3.0 + 2.25
    for k, printed in enumerate(errors):
        _, y = fractional_adams(right_hand_side, alpha, 1.0, 10 * 2**k)
        assert f"{y[-1] - exact:.2e}" == printed


@pytest.mark.parametrize(
    ("alpha", "values"),
    [
        (0.5, [0.43683874, 0.55378186, 0.62101364, 0.66601874, 0.69873923]),
        (0.75, [0.30997528, 0.48163169, 0.59778267, 0.67884950, 0.73683667]),
        (1.0, np.tanh([0.2, 0.4, 0.6, 0.8, 1.0])),
    ],
)
def test_fractional_riccati(alpha, values):
    # D^alpha y = 1 - y^2 at .2 ... 1 (computed; several published columns are wrong in the second
    # or third digit); alpha = 1 is tanh.
    runs = [riccati_adams(alpha - 0.5, 1.0, 0.0, -1.0, 1.0, n) for n in (500, 1000, 2000)]
    at = [psi[np.arange(1, 6) * (len(psi) // 5), 0] for _, psi, _ in runs]
    np.testing.assert_allclose(aitken(*at), values, rtol=0, atol=2e-8)
    _, y = fractional_adams(lambda t, y: 1.0 - y * y, alpha, 1.0, 1000)
    np.testing.assert_allclose(y[200::200], values, rtol=0, atol=5e-6)


@pytest.mark.parametrize(
    ("alpha", "value"), [(0.5, 1.79821473), (0.75, 1.81850983), (0.9, 1.76527519)]
)
def test_fractional_riccati_with_drift(alpha, value):
    # D^alpha y = 1 + 2y - y^2 at x = 1 (computed).
    ends = [riccati_adams(alpha - 0.5, 1.0, 2.0, -1.0, 1.0, n)[1][-1, 0] for n in (500, 1000, 2000)]
    assert aitken(*ends) == pytest.approx(value, abs=1e-7)


def test_vector_system_and_initial_slope():
    # D^1.5 y = -y, y(0) = 1, y'(0) = 0 has y = E_{1.5,1}(-t^1.5), by its series; the second
    # component is the same equation with y'(0) = 1: E_{1.5,1} + t E_{1.5,2}.
    def series(beta, t):
        return sum((-(t**1.5)) ** k / math.gamma(1.5 * k + beta) for k in range(60))

    t, y = fractional_adams(lambda t, y: -y, 1.5, 2.0, 800, [[1.0, 1.0], [0.0, 1.0]])
    assert y.shape == (801, 2)
    assert t[-1] == 2.0
    expected = [series(1.0, 2.0), series(1.0, 2.0) + 2.0 * series(2.0, 2.0)]
    np.testing.assert_allclose(y[-1], expected, atol=2e-5)


def test_each_step_solves_the_corrector_at_the_stable_root():
    hurst, steps, horizon = 0.1, 60, 0.8
    c0, c1, c2 = -0.5 * (U * U + 1j * U), 1j * U * -0.7 * 0.4 - 0.3, 0.08
    _, psi, F = riccati_adams(hurst, c0, c1, c2, horizon, steps)
    np.testing.assert_allclose(F, c0 + c1 * psi + c2 * psi**2, rtol=1e-13, atol=1e-13)
    first, lagged = corrector_weights(hurst + 0.5, steps)
    w = (horizon / steps) ** (hurst + 0.5) / math.gamma(hurst + 2.5)
    for n in range(1, steps + 1):
        total = first[n] * F[0] + sum(lagged[n - j] * F[j] for j in range(1, n + 1))
        np.testing.assert_allclose(psi[n], w * total, rtol=1e-12, atol=1e-14)
    assert np.all((1.0 - w * (c1 + 2.0 * c2 * psi[1:])).real >= 0.0)


@pytest.mark.parametrize("maturity", [0.07, 1.0])
@pytest.mark.parametrize("curve", [DRIVEN, MARKET], ids=["driven", "market"])
def test_log_transform_converges_to_the_power_series(curve, maturity):
    runs = [log_transform_adams(U, maturity, n, **ROUGH, **curve) for n in (400, 800, 1600)]
    exact = [complex(oracle.log_transform(z, maturity, **ROUGH, **curve).value) for z in U]
    errors = [np.abs(run - exact).max() for run in runs]
    # order 1 + alpha = 1.62: smooth right-hand side in t^alpha
    assert errors[1] < errors[0] * 2.0**-1.5
    assert errors[2] < errors[1] * 2.0**-1.5
    assert errors[2] < 4e-6
    np.testing.assert_allclose(aitken(*runs), exact, rtol=0, atol=2e-8)


@pytest.mark.parametrize("curve", [DRIVEN, MARKET], ids=["driven", "market"])
def test_half_is_the_classical_model(curve):
    model = {"vol_of_vol": 0.6, "correlation": -0.7, "mean_reversion": 1.0}
    exact = classical.log_transform(U, 1.5, **model, **curve)
    runs = [log_transform_adams(U, 1.5, n, hurst=0.5, **model, **curve) for n in (250, 500, 1000)]
    errors = [np.abs(run - exact).max() for run in runs]
    assert errors[1] == pytest.approx(errors[0] / 4.0, rel=0.05)  # order 2
    np.testing.assert_allclose(aitken(*runs), exact, rtol=0, atol=1e-8)


@pytest.mark.parametrize("curve", [DRIVEN, MARKET], ids=["driven", "market"])
def test_identities(curve):
    z = np.array([0.0, -1j, 7.0 - 0.3j, -7.0 - 0.3j])
    value = log_transform_adams(z, 0.9, 50, **ROUGH, **curve)
    np.testing.assert_allclose(value[:2], 0.0, atol=1e-15)
    assert value[2] == pytest.approx(np.conj(value[3]), rel=1e-14)


def test_stays_bounded_where_the_explicit_scheme_overflows():
    u, nu, rho = 1000.0, 0.331, -0.681
    c0, c1, c2 = -0.5 * (u * u + 1j * u), 1j * u * rho * nu, 0.5 * nu * nu
    with np.errstate(over="ignore", invalid="ignore"):
        _, explicit = fractional_adams(
            lambda t, y: c0 + c1 * y + c2 * y * y, 0.62, 1.0, 50, np.zeros(1, complex)
        )
    assert not np.all(np.isfinite(explicit))
    curve = {"variance_times": [1.0], "variance_levels": [0.04]}
    value = log_transform_adams([100.0, u, 3000.0], 1.0, 50, **ROUGH, **curve)
    assert np.all(value.real < 0.0)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: fractional_adams(lambda t, y: y, 2.0, 1.0, 5), "alpha must lie"),
        (lambda: fractional_adams(lambda t, y: y, 1.5, 1.0, 5, [1.0]), r"initial must have shape"),
        (lambda: riccati_adams(0.6, 1.0, 0.0, 1.0, 1.0, 5), "hurst must lie"),
        (lambda: riccati_adams(0.1, 1.0, 0.0, 1.0, 0.0, 5), "horizon must be positive"),
        (lambda: riccati_adams(0.1, 1.0, 0.0, 1.0, 1.0, 0), "steps must be at least 1"),
        (lambda: riccati_adams(0.1, [[1.0]], 0.0, 1.0, 1.0, 5), "one-dimensional"),
        (lambda: log_transform_adams(1.0, 1.0, 5, **ROUGH), "give either"),
        (lambda: log_transform_adams(1.0, 1.0, 5, **ROUGH, **DRIVEN, **MARKET), "give either"),
        (
            lambda: log_transform_adams(
                1.0, 1.0, 5, **ROUGH, variance_times=[1.0, 0.5], variance_levels=[0.1, 0.1]
            ),
            "positive and increasing",
        ),
        (
            lambda: log_transform_adams(
                1.0, 1.0, 5, **ROUGH, variance_times=[1.0], variance_levels=[0.1, 0.1]
            ),
            r"got shapes \(1,\) and \(2,\)",
        ),
    ],
)
def test_bad_arguments(call, message):
    with pytest.raises(ValueError, match=message):
        call()

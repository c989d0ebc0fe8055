"""The closed form at hurst 1/2 against published prices, mpmath arithmetic and quadrature."""

import itertools
import math

import mpmath
import numpy as np
import pytest
from scipy.integrate import quad, solve_ivp

from pyvolterra.reference import classical
from pyvolterra.reference.oracle import price_single_integral

MODEL = {"vol_of_vol": 0.6, "correlation": -0.7, "mean_reversion": 1.0}
NAMES = ("vol_of_vol", "correlation", "mean_reversion", "initial_variance", "long_run_variance")
LEWIS = dict(zip(NAMES, (1.0, -0.5, 4.0, 0.04, 0.25), strict=True))
COS = dict(zip(NAMES, (0.5751, -0.5711, 1.5768, 0.0175, 0.0398), strict=True))
COS_MODEL = {name: COS[name] for name in NAMES[:3]}


def prices(spot, maturity, strikes, *, forward=100.0, discount=1.0, call=True, digits=15):
    results = price_single_integral(
        lambda z: classical.log_transform_mp(z, maturity, **spot),
        strikes,
        forward=forward,
        discount=discount,
        call=call,
        digits=digits,
    )
    return [float(result.value) for result in results]


def test_lewis_reference_prices():
    # Lewis's reference prices, web note of 15 Feb 2019: about 20 digits vouched (read,
    # reproduced). S=100, r=.01, q=.02, T=1.
    strikes = [80.0, 90.0, 100.0, 110.0, 120.0]
    puts = [
        7.958878113256768285213,
        12.017966707346304987710,
        17.055270961270109413523,
        23.017825898442800538909,
        29.811026202682471843341,
    ]
    calls = [
        26.774758743998854221382,
        20.933349000596710388139,
        16.070154917028834278213,
        12.132211516709844867861,
        9.024913483457835636553,
    ]
    market = {"forward": 100.0 * math.exp(-0.01), "discount": math.exp(-0.01)}
    np.testing.assert_allclose(prices(LEWIS, 1.0, strikes, call=False, **market), puts, rtol=1e-14)
    np.testing.assert_allclose(prices(LEWIS, 1.0, strikes, **market), calls, rtol=1e-14)


def test_lewis_model_at_a_short_maturity():
    # The same model at T = .01 (computed).
    market = {"forward": 100.0 * math.exp(-1e-4), "discount": math.exp(-1e-4), "digits": 20}
    puts = prices(LEWIS, 0.01, [90.0, 95.0], call=False, **market)
    np.testing.assert_allclose(puts, [2.7291051903436856e-5, 0.013459205968239052], rtol=1e-12)
    calls = prices(LEWIS, 0.01, [100.0, 105.0, 110.0], **market)
    expected = [0.82536231024952415, 0.0029045282404359385, 9.618389904733128e-8]
    np.testing.assert_allclose(calls, expected, rtol=1e-12)


def test_cos_paper_prices():
    # A novel pricing method for European options based on Fourier-cosine series expansions, SIAM
    # J. Sci. Comput. 31, 2008 (memory). The values here are computed; the printed 5.785155450 and
    # 22.318945791474590 are wrong past about 8 and 11 significant digits.
    one, ten = prices(COS, 1.0, [100.0])[0], prices(COS, 10.0, [100.0])[0]
    assert one == pytest.approx(5.785155434376189028140, rel=1e-14)
    assert ten == pytest.approx(22.318945791154489180, rel=1e-14)
    assert 1e-8 < abs(one - 5.785155450) < 2e-8
    assert 1e-10 < abs(ten - 22.318945791474590) < 1e-9


@pytest.mark.parametrize(
    ("parameters", "maturity", "rate", "expected"),
    [
        # Exact simulation of stochastic volatility and other affine jump diffusion processes,
        # Oper. Res. 54, 2006 (memory, reproduced).
        ((0.61, -0.7, 6.21, 0.010201, 0.019), 1.0, 0.0319, {100: "6.8061"}),
        ((1.0, -0.3, 2.0, 0.09, 0.09), 5.0, 0.05, {100: "34.9998"}),
        # Simple and efficient simulation of the Heston stochastic volatility model, J. Comput.
        # Finance 11, 2008, cases I to III (memory, reproduced).
        (
            (1.0, -0.9, 0.5, 0.04, 0.04),
            10.0,
            0.0,
            {60: "44.330", 100: "13.085", 140: "0.296"},
        ),
        (
            (0.9, -0.5, 0.3, 0.04, 0.04),
            15.0,
            0.0,
            {60: "45.287", 100: "16.649", 140: "5.138"},
        ),
        (
            (1.0, -0.3, 1.0, 0.09, 0.09),
            5.0,
            0.05,
            {60: "56.575", 100: "33.597", 140: "18.157"},
        ),
    ],
)
def test_published_prices_to_print(parameters, maturity, rate, expected):
    values = prices(
        dict(zip(NAMES, parameters, strict=True)),
        maturity,
        list(expected),
        forward=100.0 * math.exp(rate * maturity),
        discount=math.exp(-rate * maturity),
        digits=8,
    )
    for value, printed in zip(values, expected.values(), strict=True):
        assert f"{value:.{len(printed.split('.')[1])}f}" == printed


def test_explosion_times():
    # Closed form of Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007;
    # times computed, for the COS paper's parameters.
    assert classical.explosion_time(20.0, **COS_MODEL) == pytest.approx(0.619044908851, abs=1e-12)
    assert classical.explosion_time(-5.0, **COS_MODEL) == pytest.approx(0.984375126517, abs=1e-12)
    assert classical.explosion_time(-1.0, **COS_MODEL) == math.inf
    assert classical.explosion_time(5.0, **COS_MODEL) == math.inf
    # both branches against the zero of the denominator of psi: it grows like 1/(c2 (T* - t))
    for model, moment in ((COS_MODEL, 20.0), (COS_MODEL | {"correlation": 0.9}, 6.0)):
        time = classical.explosion_time(moment, **model)
        assert math.isfinite(time)
        near = classical.psi(-1j * moment, time * (1.0 - 1e-6), **model)
        assert near.real * 0.5 * model["vol_of_vol"] ** 2 * time * 1e-6 == pytest.approx(
            1, rel=1e-3
        )


def test_psi_solves_the_differential_equation():
    # An independent solver: Dormand-Prince of SciPy.
    u, nu, rho, reversion = 12.0 - 0.5j, *MODEL.values()
    c0, c1, c2 = -0.5 * (u * u + 1j * u), 1j * u * rho * nu - reversion, 0.5 * nu * nu
    solution = solve_ivp(
        lambda t, y: [c0 + c1 * y[0] + c2 * y[0] ** 2, y[0]],
        (0.0, 2.0),
        [0j, 0j],
        method="DOP853",
        rtol=1e-12,
        atol=1e-13,
    )
    assert classical.psi(u, 2.0, **MODEL) == pytest.approx(solution.y[0, -1], rel=1e-10)
    assert classical.integral_of_psi(u, 2.0, **MODEL) == pytest.approx(solution.y[1, -1], rel=1e-10)


def test_accuracy_without_cancellation():
    # Every corner: vol-of-vol, reversion and time small or large, u near 0 and -i.
    u = np.array(
        [0.0, 1e-9, -1j, -1j + 1e-9, 0.5, 3.0, 200.0, 3000.0, 50.0 - 0.5j, 1.0 - 1j, -0.5j, -2j]
    )
    cases = itertools.product((0.0, 1e-8, 0.1, 5.0), (-1.0, -0.7, 0.8), (1e-6, 0.3), (1e-4, 1, 50))
    checked = 0
    for nu, rho, reversion, t in cases:
        model = {"vol_of_vol": nu, "correlation": rho, "mean_reversion": reversion}
        psi, integral = classical.psi(u, t, **model), classical.integral_of_psi(u, t, **model)
        for i, z in enumerate(u):
            if classical.explosion_time(-z.imag, **model) < 1.2 * t:
                continue
            exact = [
                complex(
                    classical.log_transform_mp(
                        z, t, **model, initial_variance=v, long_run_variance=1.0 - v
                    )
                )
                for v in (1.0, 0.0)
            ]
            assert abs(psi[i] - exact[0]) <= 3e-13 * abs(exact[0])
            assert abs(integral[i] * reversion - exact[1]) <= 3e-13 * abs(exact[1])
            checked += 1
    assert checked > 700


def test_without_reversion_and_vol_of_vol():
    still = {"vol_of_vol": 0.0, "correlation": -0.5, "mean_reversion": 0.0}
    assert classical.psi(2.0, 3.0, **still) == pytest.approx(3.0 * (-2.0 - 1j))
    assert classical.integral_of_psi(2.0, 3.0, **still) == pytest.approx(4.5 * (-2.0 - 1j))


@pytest.mark.parametrize("maturity", [0.05, 0.3, 2.0])
def test_curves_against_quadrature(maturity):
    times, levels, u = [0.1, 0.45, 1.0], [0.02, 0.05, 0.03], 6.0 - 0.4j
    nu, rho, reversion = MODEL.values()
    c0, c1, c2 = -0.5 * (u * u + 1j * u), 1j * u * rho * nu - reversion, 0.5 * nu * nu

    def integral(weight):
        def level(t):
            return levels[min(np.searchsorted(times, t), 2)]

        points = [maturity - t for t in times[:2] if t < maturity]
        parts = [
            quad(
                lambda s, part=part: getattr(
                    level(maturity - s) * complex(weight(classical.psi(u, s, **MODEL))), part
                ),
                0.0,
                maturity,
                points=points or None,
                epsabs=1e-12,
                epsrel=1e-12,
            )[0]
            for part in ("real", "imag")
        ]
        return complex(*parts)

    driven = classical.log_transform(
        u, maturity, **MODEL, initial_variance=0.03, drive_times=times, drive_levels=levels
    )
    expected = 0.03 * complex(classical.psi(u, maturity, **MODEL)) + integral(lambda p: p)
    assert driven[0] == pytest.approx(expected, rel=1e-10)
    market = classical.log_transform(
        u, maturity, **MODEL, variance_times=times, variance_levels=levels
    )
    expected = integral(lambda p: c0 + (c1 + reversion) * p + c2 * p * p)
    assert market[0] == pytest.approx(expected, rel=1e-10)


def test_textbook_grid_equals_the_stable_form():
    u, maturities = np.linspace(0.0, 100.0, 41) - 0.5j, np.array([0.1, 1.0, 5.0])
    grid = classical.log_transform_spot(u, maturities, *COS.values())
    assert grid.shape == (3, 41)
    for row, maturity in zip(grid, maturities, strict=True):
        expected = classical.log_transform(
            u,
            maturity,
            **COS_MODEL,
            initial_variance=COS["initial_variance"],
            drive_times=[1.0],
            drive_levels=[COS["mean_reversion"] * COS["long_run_variance"]],
        )
        np.testing.assert_allclose(row, expected, rtol=1e-12)


def test_identities():
    curve = {"variance_times": [0.5, 1.0], "variance_levels": [0.02, 0.07]}
    value = classical.log_transform([0.0, -1j, 9.0 - 0.3j, -9.0 - 0.3j], 3.0, **MODEL, **curve)
    np.testing.assert_array_equal(value[:2], 0.0)
    assert value[2] == pytest.approx(np.conj(value[3]), rel=1e-15)
    # The imaginary part follows the winding of the transform: no jumps of 2 pi along u.
    u = np.linspace(0.0, 400.0, 4001)
    line = classical.log_transform(u, 10.0, **COS_MODEL, **curve)
    assert np.max(np.abs(np.diff(line.imag))) < 1.0
    assert abs(line[-1].imag) > 2.0 * math.pi


def test_mpmath_form_keeps_its_precision():
    with mpmath.workdps(40):
        coarse = classical.log_transform_mp(mpmath.mpc(3, -0.5), 1.0, **COS)
    with mpmath.workdps(80):
        fine = classical.log_transform_mp(mpmath.mpc(3, -0.5), 1.0, **COS)
        assert abs(coarse - fine) < mpmath.mpf(10) ** -60

"""Explosion times and the strip of finite moments.

Sources: Moment explosions in stochastic volatility models, Finance Stoch. 11, 2007 (closed form;
memory, checked against quadrature here); Moment explosions in the rough Heston model, arXiv
1801.09458 (the rough model explodes exactly when the classical one does: read; bounds: memory).
"""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate

import pyvolterra as pv
from pyvolterra.reference import classical, explosion

CURVE = pv.ForwardVariance.piecewise_constant([0.5, 2.0], [0.04, 0.09])
COS_MODEL = {"vol_of_vol": 0.5751, "correlation": -0.5711, "mean_reversion": 1.5768}


def model(hurst, vol_of_vol, correlation, mean_reversion=0.0, curve=CURVE):
    kernel = pv.FractionalKernel(hurst) if hurst < 0.5 else pv.ConstantKernel()
    return pv.VolterraHeston(kernel, vol_of_vol, correlation, curve, mean_reversion)


def coefficients(m, p):
    """c0, c1, c2 of the Riccati-Volterra equation of the moment p."""
    nu = m.vol_of_vol
    return 0.5 * p * (p - 1.0), p * m.correlation * nu - m.mean_reversion, 0.5 * nu * nu


MODELS = st.builds(
    model,
    st.floats(0.01, 0.499),
    st.floats(0.05, 5.0),
    st.floats(-1.0, 1.0),
    st.floats(0.0, 5.0),
)
OUTSIDE = st.one_of(st.floats(-100.0, -0.1), st.floats(1.1, 100.0))


def test_times_of_the_cos_paper():
    # Parameters: A novel pricing method for European options based on Fourier-cosine series
    # expansions, SIAM J. Sci. Comput. 31, 2008 (memory); times computed from the closed form.
    m = model(0.5, **COS_MODEL)
    assert m.explosion_time(20.0) == pytest.approx(0.619044908851, abs=1e-12)
    assert m.explosion_time(-5.0) == pytest.approx(0.984375126517, abs=1e-12)
    assert m.explosion_time(-1.0) == m.explosion_time(5.0) == math.inf
    lower, upper = m.moment_strip(0.619044908851)
    assert upper == pytest.approx(20.0, rel=1e-9)
    assert lower < -5.0


@settings(max_examples=200, deadline=None)
@given(MODELS, OUTSIDE)
def test_classical_closed_form(m, p):
    m = model(0.5, m.vol_of_vol, m.correlation, m.mean_reversion)
    expected = classical.explosion_time(
        p,
        vol_of_vol=m.vol_of_vol,
        correlation=m.correlation,
        mean_reversion=m.mean_reversion,
    )
    c0, c1, c2 = coefficients(m, p)
    # Beside a double root of the quadratic both sides lose digits to its discriminant.
    cancellation = abs(c1 * c1 - 4.0 * c0 * c2) / (c1 * c1 + 4.0 * c0 * c2)
    if cancellation > 1e-8:
        assert m.explosion_time(p) == pytest.approx(expected, rel=1e-6)


def test_classical_time_is_the_integral_of_the_inverse_slope():
    # d psi/dt = f(psi): the time is int_0^oo dpsi/f, here by adaptive quadrature.
    for p, rho, reversion in ((12.0, 0.4, 0.3), (-9.0, -0.7, 0.0), (30.0, -0.5, 1.0)):
        m = model(0.5, 0.8, rho, reversion)
        c0, c1, c2 = coefficients(m, p)
        time, _ = integrate.quad(
            lambda y, c=(c0, c1, c2): 1 / (c[0] + y * (c[1] + c[2] * y)), 0, math.inf
        )
        assert m.explosion_time(p) == pytest.approx(time, rel=1e-8)


# hurst, vol of vol, correlation, mean reversion, moment
RUNGS = [
    (0.01, 0.5, -0.7, 0.3, -20.0),
    (0.01, 3.0, 0.5, 0.0, 4.0),
    (0.05, 1.0, 0.0, 0.0, 8.0),
    (0.1, 0.3, -0.7, 0.3, -40.0),
    (0.12, 0.331, -0.681, 0.1, 60.0),
    (0.12, 0.331, -0.681, 0.1, -15.0),
    (0.2, 5.0, -1.0, 5.0, -100.0),
    (0.3, 0.05, 0.3, 0.0, 100.0),
    (0.4, 1.5, -0.4, 2.0, 50.0),
    (0.49, 0.8, 0.9, 1.0, 6.0),
]


@pytest.mark.parametrize("case", RUNGS, ids=str)
def test_against_the_power_series(case):
    hurst, nu, rho, reversion, p = case
    m = model(hurst, nu, rho, reversion)
    c = coefficients(m, p)
    reference = explosion.blow_up_time(*c, hurst + 0.5, digits=5, order=50)
    time = m.explosion_time(p)
    assert abs(time - reference.value) <= reference.error + 2e-9 * time


def test_the_reference_at_the_classical_end():
    # tan: d psi/dt = 1 + psi^2 blows up at pi/2.
    assert float(explosion.blow_up_time(1.0, 0.0, 1.0, 1.0, order=20).value) == pytest.approx(
        math.pi / 2, rel=1e-12
    )
    reference = explosion.explosion_time(20.0, hurst=0.5, **COS_MODEL, order=40)
    assert reference == pytest.approx(0.619044908851, abs=1e-11)
    assert explosion.explosion_time(5.0, hurst=0.1, **COS_MODEL) == math.inf
    with pytest.raises(explosion.UncertifiedError, match="order 12 vouches"):
        explosion.blow_up_time(1.0, -1.9, 1.0, 0.55, order=12)


@settings(max_examples=60, deadline=None)
@given(MODELS, OUTSIDE)
def test_explodes_when_the_classical_model_does(m, p):
    smooth = model(0.5, m.vol_of_vol, m.correlation, m.mean_reversion)
    assert math.isinf(m.explosion_time(p)) == math.isinf(smooth.explosion_time(p))


@pytest.mark.parametrize("p", [-30.0, -3.0, 4.0, 25.0])
def test_classical_limit(p):
    # The time is smooth in hurst: at a distance of 1e-4 and 1e-5 the differences are as 10 to 1.
    times = [model(h, 0.9, -0.2, 0.4).explosion_time(p) for h in (0.4999, 0.49999, 0.5)]
    assert times[0] == pytest.approx(times[2], rel=2e-3)
    assert (times[0] - times[2]) / (times[1] - times[2]) == pytest.approx(10.0, rel=2e-3)


@settings(max_examples=60, deadline=None)
@given(MODELS, OUTSIDE, st.floats(0.01, 100.0))
def test_change_of_the_unit_of_time(m, p, c):
    # t -> c t multiplies K(t) by c^(alpha - 1), hence nu by c^-alpha and lambda likewise.
    factor = c ** -(m.kernel.hurst + 0.5)
    other = model(m.kernel.hurst, m.vol_of_vol * factor, m.correlation, m.mean_reversion * factor)
    time, scaled = m.explosion_time(p), other.explosion_time(p)
    if math.isinf(time):
        assert math.isinf(scaled)
    else:
        assert scaled == pytest.approx(c * time, rel=1e-6)


@settings(max_examples=60, deadline=None)
@given(MODELS, st.floats(1.0, 100.0))
def test_change_of_numeraire(m, p):
    # With the underlying as numeraire X becomes -X, the correlation its negative and the mean
    # reversion lambda - rho nu, and E[exp(pX)] the moment 1 - p: the Riccati equation is the same.
    reversion = m.mean_reversion - m.correlation * m.vol_of_vol
    if reversion >= 0.0:
        other = model(m.kernel.hurst, m.vol_of_vol, -m.correlation, reversion)
        assert other.explosion_time(1.0 - p) == pytest.approx(m.explosion_time(p), rel=1e-6)


@settings(max_examples=60, deadline=None)
@given(MODELS, OUTSIDE)
def test_bounds(m, p):
    time = m.explosion_time(p)
    if math.isinf(time):
        return
    alpha = m.kernel.hurst + 0.5
    c0, c1, c2 = coefficients(m, p)
    # psi reaches y no sooner than t^alpha max f/Gamma(1 + alpha) = y, for every y (derived).
    y = np.geomspace(1e-3, 1e3, 500) * math.sqrt(c0 / c2)
    largest = np.maximum(c0, c0 + y * (c1 + c2 * y))
    assert time >= np.max((math.gamma(1.0 + alpha) * y / largest) ** (1.0 / alpha)) * (1 - 1e-9)
    # Rough against smooth: for a rising right-hand side the time lies within a factor of 4 of
    # Gamma(1 + alpha)^(1/alpha) int (y/f)^(1/alpha) dy/y (arXiv 1801.09458, from memory).
    if c1 >= 0.0:
        scale = math.sqrt(c0 / c2)

        def integrand(x):
            height = scale * math.exp(x)
            return (height / (c0 + height * (c1 + c2 * height))) ** (1.0 / alpha)

        size, _ = integrate.quad(integrand, -60.0, 60.0, points=[0.0], limit=400)
        middle = math.gamma(1.0 + alpha) ** (1.0 / alpha) * size
        assert middle / 4.0 <= time <= 4.0 * middle


@settings(max_examples=30, deadline=None)
@given(MODELS, st.sampled_from([-1.0, 1.0]))
def test_larger_moments_explode_sooner(m, sign):
    distances = np.geomspace(0.01, 1e5, 25)
    times = [m.explosion_time((sign > 0.0) + sign * float(d)) for d in distances]
    finite = [t for t in times if math.isfinite(t)]
    assert times[len(times) - len(finite) :] == finite
    assert all(b <= a * (1.0 + 1e-7) for a, b in itertools.pairwise(finite))


@settings(max_examples=60, deadline=None)
@given(MODELS, st.floats(0.003, 30.0))
def test_the_strip_ends_where_moments_explode(m, maturity):
    lower, upper = m.moment_strip(maturity)
    assert lower <= 0.0
    assert upper >= 1.0
    for end, origin in ((lower, 0.0), (upper, 1.0)):
        if math.isinf(end):
            assert abs(m.correlation) == 1.0
            assert m.explosion_time(origin + math.copysign(1e6, end)) > maturity
        elif abs(end - origin) > 1e-9:
            inside, outside = (origin + (end - origin) * (1.0 + s * 1e-6) for s in (-1, 1))
            assert m.explosion_time(outside) <= maturity < m.explosion_time(inside)


def test_strips_shrink_with_maturity():
    m = model(0.1, 0.5, -0.6, 0.2)
    strips = np.array([m.moment_strip(t) for t in (1e-3, 1e-2, 0.1, 1.0, 10.0, 1000.0)])
    assert np.all(np.diff(strips[:, 0]) > 0.0)
    assert np.all(np.diff(strips[:, 1]) < 0.0)
    # They close down on the moments that never explode: the roots of
    # (lambda - p rho nu)^2 = (p^2 - p) nu^2.
    never = np.sort(np.roots([0.25 * (0.36 - 1.0), 0.25 + 2 * 0.2 * 0.6 * 0.5, 0.04]))
    assert strips[-1, 0] < never[0]
    assert strips[-1, 1] > never[1]
    np.testing.assert_allclose(m.moment_strip(1e9), never, rtol=1e-3)


def test_strip_of_a_symmetric_model():
    # At correlation and mean reversion zero the equation of p is that of 1 - p.
    for hurst in (0.02, 0.3, 0.5):
        lower, upper = model(hurst, 1.3, 0.0).moment_strip(0.7)
        assert lower + upper == pytest.approx(1.0, abs=1e-7 * upper)


def test_no_moment_explodes():
    assert model(0.1, 0.0, -0.5, 1.0).moment_strip(1.0) == (-math.inf, math.inf)
    assert model(0.1, 0.0, -0.5, 1.0).explosion_time(-1e6) == math.inf
    for hurst in (0.1, 0.5):
        m = model(hurst, 0.8, -1.0, 0.3)
        for p in (0.0, 0.5, 1.0, 2.0, 100.0, 1e6):
            assert m.explosion_time(p) == math.inf  # the losses of V hedge its gains
        assert m.moment_strip(5.0)[1] == math.inf
        assert -math.inf < m.moment_strip(5.0)[0] < 0.0
    # Here 2 lambda >= nu: pX is bounded for p < 0.
    assert model(0.2, 0.8, 1.0, 0.4).moment_strip(50.0)[0] == -math.inf


def test_lower_moments_at_correlation_one():
    # X = -int V/2 + (I^(1-alpha)(V - g0) + lambda int V)/nu, so -pX is bounded above for all
    # p > 0 until t^-alpha/Gamma(1 - alpha) = nu/2 - lambda (derived), and beyond it explodes.
    for hurst, nu, reversion in ((0.05, 2.0, 0.0), (0.2, 1.0, 0.2), (0.4, 3.0, 0.5)):
        alpha = hurst + 0.5
        first = (math.gamma(1.0 - alpha) * (0.5 * nu - reversion)) ** (-1.0 / alpha)
        m = model(hurst, nu, 1.0, reversion)
        assert m.moment_strip(0.999 * first)[0] == -math.inf
        assert -math.inf < m.moment_strip(1.05 * first)[0] < -1.0
        # The time passes the limit by p^(-1/(1 + 2 alpha)), the width of the fold (derived).
        gaps = [m.explosion_time(-p) / first - 1.0 for p in (1e3, 1e6, 1e9, 1e12)]
        assert gaps[0] > gaps[1] > gaps[2] > gaps[3] > 0.0
        law = 1000.0 ** (1.0 / (1.0 + 2.0 * alpha))
        assert gaps[2] / gaps[3] == pytest.approx(law, rel=0.2)
        assert m.explosion_time(-1e16) == pytest.approx(first, rel=1e-4)
    # The classical model has no such time.
    assert model(0.5, 2.0, 1.0).moment_strip(1e-3)[0] > -math.inf


def test_extreme_requests():
    m = model(0.1, 1.0, -0.5, 0.5)
    lower, upper = m.moment_strip(1e-6)
    assert m.explosion_time(upper) == pytest.approx(1e-6, rel=1e-7)
    assert m.explosion_time(lower) == pytest.approx(1e-6, rel=1e-7)
    # Large moments leave c0 and c1 alone to count: T scales like p^(-1/alpha).
    ratio = m.explosion_time(1e10) / m.explosion_time(1e12)
    assert ratio == pytest.approx(100.0 ** (1.0 / 0.6), rel=1e-6)
    assert m.explosion_time(1.0 + 1e-9) == math.inf
    up = model(0.1, 2.0, 1.0)  # c1 > 0: every p > 1 explodes, ever later towards 1
    times = [up.explosion_time(1.0 + d) for d in (1e-3, 1e-8, 1e-15)]
    assert 0.0 < times[0] < times[1] < times[2] < math.inf


def test_the_curve_does_not_matter():
    curve = pv.ForwardVariance.driven(pv.FractionalKernel(0.2), 0.09, [1.0], [0.02], 0.5)
    a, b = model(0.2, 0.7, -0.3, 0.5), model(0.2, 0.7, -0.3, 0.5, curve)
    assert a.explosion_time(-12.0) == b.explosion_time(-12.0)
    assert a.moment_strip(0.5) == b.moment_strip(0.5)


@pytest.mark.parametrize("hurst", [0.02, 0.1, 0.3, 0.45, 0.5])
def test_transform_inside_and_outside(hurst):
    m = model(hurst, 0.6, -0.4, 0.3)
    for p in (-12.0, 30.0):
        time = m.explosion_time(p)
        value = m.log_characteristic_function(-1j * p, [0.25 * time, 0.8 * time])
        assert np.all(np.isfinite(value))
        assert value[1].real > value[0].real > 0.0
        for u in (-1j * p, 3.0 - 1j * p):
            with pytest.raises(pv.MomentExplosionError):
                m.log_characteristic_function(u, [0.5 * time, time * (1.0 + 1e-6)])


def test_the_message_names_maturity_and_critical_moment():
    m = model(0.1, 0.6, -0.4, 0.3)
    time = m.explosion_time(-12.0)
    maturities = [0.5 * time, 1.25 * time, 2.0 * time]
    lower, _ = m.moment_strip(maturities[1])
    with pytest.raises(pv.MomentExplosionError) as caught:
        m.characteristic_function([1.0, 2.0 + 12j], maturities)
    message = str(caught.value)
    for part in (
        "imaginary part 12 ",
        f"maturity {maturities[1]:.6g}:",
        "p = -12 ",
        f"critical moment {lower:.6g})",
    ):
        assert part in message


@pytest.mark.parametrize("name", ["moment_strip", "explosion_time"])
def test_bad_arguments(name):
    method = getattr(model(0.1, 0.6, -0.4), name)
    argument = "maturity" if name == "moment_strip" else "moment"
    for value, error in (
        ("1", TypeError),
        ([1.0], TypeError),
        (math.nan, ValueError),
        (math.inf, ValueError),
    ):
        with pytest.raises(error, match=f"^{argument} must be"):
            method(value)


def test_maturity_must_be_positive():
    for value in (0.0, -1.0):
        with pytest.raises(ValueError, match=r"^maturity must be positive"):
            model(0.1, 0.6, -0.4).moment_strip(value)

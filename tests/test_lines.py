"""Interpolation along the lines Im u = 0 and Im u = -1/2, and what it must never change."""

import numpy as np
import pytest
from flat_models import flat_model

import pyvolterra as pv
from pyvolterra.reference import oracle

MATURITIES = np.geomspace(1 / 52, 3.0, 7)


@pytest.mark.parametrize("imaginary", [0.0, -0.5])
@pytest.mark.parametrize("full_output", [False, True])
def test_scalar_equals_vector_bit_for_bit(imaginary, full_output):
    model = flat_model()
    u = np.array([-900.0, -3.0, 0.0, 1e-6, 0.7, 55.0, 300.0, 511.0, 513.0, 5000.0]) + 1j * imaginary
    options = {"full_output": full_output}
    together = model.log_characteristic_function(u, MATURITIES, **options)
    values = together[0] if full_output else together
    for k, one in enumerate(u):
        alone = model.log_characteristic_function(one, MATURITIES, **options)
        assert np.array_equal(alone[0] if full_output else alone, values[:, k])
        if full_output:
            assert np.array_equal(alone[1].error_estimate, together[1].error_estimate[:, k])


@pytest.mark.parametrize("imaginary", [0.0, -0.5])
def test_conjugate_symmetry(imaginary):
    u = np.array([0.3, 4.0, 70.0, 480.0])
    model = flat_model()
    right = model.log_characteristic_function(u + 1j * imaginary, MATURITIES)
    left = model.log_characteristic_function(-u + 1j * imaginary, MATURITIES)
    assert np.array_equal(left, right.conj())


def test_no_line_where_the_variance_is_huge():
    """|log phi| is large everywhere: there is no grid, and u on the axis is solved for itself."""
    kernel = pv.FractionalKernel(0.2)
    curve = pv.ForwardVariance.driven(kernel, 0.04, [0.5, 1.0], [0.02, 0.04], 5.0)
    model = pv.VolterraHeston(kernel, 0.3, 0.0, curve, 5.0)
    values = model.log_characteristic_function([-0.5j, 1.0 - 0.5j], [30.0, 1000.0])
    alone = model.log_characteristic_function(-0.5j, [30.0, 1000.0], scheme="graded")
    assert np.array_equal(values[:, 0], alone)


def test_one_at_zero_whatever_the_tolerance():
    for tolerance in (1e-3, 1e-8):
        values = flat_model().characteristic_function([0.0, 1.0], MATURITIES, tolerance=tolerance)
        assert np.all(values[:, 0] == 1.0)


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-8, 1e-10])
@pytest.mark.parametrize("seed", range(8))
def test_tolerance_and_estimate(seed, tolerance):
    """Against each u solved for itself on a mesh three digits finer."""
    rng = np.random.default_rng(seed)
    model = flat_model(
        hurst=rng.uniform(0.01, 0.49),
        vol_of_vol=rng.uniform(0.1, 1.0),
        correlation=rng.choice([rng.uniform(-0.99, 0.5), rng.uniform(-1.0, -0.85)]),
        level=np.exp(rng.uniform(np.log(0.01), np.log(0.15))),
        mean_reversion=rng.choice([0.0, rng.uniform(0.0, 3.0)]),
    )
    u = rng.choice([-1, 1], 40) * np.exp(rng.uniform(np.log(0.1), np.log(800.0), 40))
    u = u + 1j * rng.choice([0.0, -0.5, -0.3])
    exact = model.characteristic_function(
        u, MATURITIES, tolerance=max(1e-3 * tolerance, 1e-12), scheme="graded"
    )
    plain = model.characteristic_function(u, MATURITIES, tolerance=tolerance)
    checked, info = model.characteristic_function(
        u, MATURITIES, tolerance=tolerance, full_output=True
    )
    assert np.abs(plain - exact).max() <= tolerance
    assert np.abs(checked - exact).max() <= tolerance
    assert info.error_estimate.max() <= tolerance
    beyond = np.abs(checked - exact) > info.error_estimate + 1e-12
    assert beyond.mean() <= 0.005


@pytest.mark.parametrize("u", [0.4 - 0.5j, 3.0 - 0.5j, 11.0 + 0.0j])
def test_power_series(u):
    """The certified fractional power series (see the oracle for its source)."""
    model = flat_model(hurst=0.12, vol_of_vol=0.331, correlation=-0.681, level=0.0392)
    certified = oracle.log_transform(
        u,
        1.0,
        hurst=0.12,
        vol_of_vol=0.331,
        correlation=-0.681,
        mean_reversion=0.0,
        variance_times=[1.0],
        variance_levels=[0.0392],
    )
    exact = complex(getattr(certified, "value", certified))
    value = model.log_characteristic_function(u, 1.0, tolerance=1e-10)
    assert abs(np.exp(value) - np.exp(exact)) <= 1e-10


def test_a_plan_shared_by_threads_gives_the_same_bits():
    """The tables and plans of the scheme are shared; calls with many hurst indices at once."""
    from concurrent.futures import ThreadPoolExecutor

    u = np.linspace(0.0, 200.0, 33) - 0.3j
    hursts = np.linspace(0.011, 0.489, 40)

    def run(hurst):
        return flat_model(hurst=hurst).log_characteristic_function(u, MATURITIES)

    expected = [run(h) for h in hursts]
    with ThreadPoolExecutor(8) as pool:
        for _ in range(3):
            for got, want in zip(pool.map(run, hursts), expected, strict=True):
                assert np.array_equal(got, want)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda m: m.log_characteristic_function(2e8, 1.0), "u must be at most 1e\\+08 in modulus"),
        (lambda m: m.log_characteristic_function(1.0, 1001.0), "at most 1000 years"),
        (lambda m: m.price(1.0, [1.0, 2000.0]), r"maturities\[1\] must be at most 1000 years"),
        (
            lambda m: m.log_characteristic_function(1.0, 1.0, scheme="adams", steps=10**9),
            "steps must be at most 100000",
        ),
        (lambda m: m.implied_volatility(1.0, 1.0, tolerance=0.0), "tolerance must be positive"),
        (lambda m: m.implied_volatility([1.0, 1.1], [1.0, 2.0, 3.0]), "strikes \\(2,\\)"),
        (lambda m: m.price(1e-300, 1.0, forward=1e300), "strikes / forward must be"),
    ],
)
def test_limits_are_named(call, message):
    with pytest.raises(ValueError, match=message):
        call(flat_model())


def test_scheme_used():
    for hurst, scheme, used in ((0.5, "auto", "closed form"), (0.1, "auto", "graded")):
        _, info = flat_model(hurst).log_characteristic_function(
            1.0, 1.0, scheme=scheme, full_output=True
        )
        assert info.scheme == used

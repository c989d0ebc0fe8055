"""Does the transform keep its tolerance, with an error estimate and without?

    python bench/tolerance.py [--models N] [--seed S] [--tolerance T] [--wide]

Random models, each at five maturities and 40 arguments on one line, three kinds of variance curve.
The truth is the finest mesh, every u solved for itself (bench/accuracy.py compares with a series
that shares nothing with it). Counted are values beyond the tolerance without a warning, and
estimates below the error; both leave out what rounding does, 30 ulp of |u|^2 int xi |phi|.
"""

import argparse
import time
import warnings

import numpy as np

import pyvolterra as pv


def draw(g: np.random.Generator, wide: bool):
    """Hurst .005-.499; vol_of_vol .1-1, correlation -1-.5 (half of them below -.85), mean reversion
    0-3, a day to 10 years; wide: .001-.499, .05-5, -1-1, 0-8, an hour to 30 years.
    """
    log_uniform = lambda low, high, n=None: np.exp(g.uniform(np.log(low), np.log(high), n))  # noqa: E731
    hurst = g.uniform(0.001 if wide else 0.005, 0.499)
    vol_of_vol = log_uniform(0.05, 5.0) if wide else g.uniform(0.1, 1.0)
    correlation = g.choice([g.uniform(-0.99, 0.5), g.uniform(-1.0, -0.85)])
    if wide:
        correlation = g.uniform(-1.0, 1.0)
    reversion = g.choice([0.0, g.uniform(0.0, 8.0 if wide else 3.0)])
    kernel = pv.FractionalKernel(hurst)
    count = g.integers(1, 4)
    times, levels = np.sort(g.uniform(0.02, 3.0, count)), log_uniform(0.01, 0.15, count)
    kind = g.integers(3)
    if kind == 0:
        curve = pv.ForwardVariance.flat(levels[0])
    elif kind == 1:
        curve = pv.ForwardVariance.piecewise_constant(times, np.sort(levels))
    else:
        drive = levels * g.uniform(0.0, 1.5, count)
        curve = pv.ForwardVariance.driven(kernel, levels[0], times, drive, reversion)
    model = pv.VolterraHeston(kernel, vol_of_vol, correlation, curve, reversion)
    maturities = log_uniform(1 / 8760, 30.0, 5) if wide else log_uniform(1 / 365, 10.0, 5)
    size = np.concatenate([log_uniform(0.1, 1000.0, 25), g.uniform(0.0, 1000.0, 15)])
    return model, size * g.choice([-1, 1], 40) + 1j * g.choice([0, -0.5, -0.5, -0.3]), maturities


def quietly(call):
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        return call(), bool(caught)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--models", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--tolerance", type=float, default=1e-8)
    parser.add_argument("--wide", action="store_true", help="ranges far beyond the markets'")
    options = parser.parse_args()
    g, tolerance = np.random.default_rng(options.seed), options.tolerance
    values = silent_plain = silent_checked = below = seen = warned = 0
    ratios, worst, start = [], (0.0, ""), time.perf_counter()
    for _ in range(options.models):
        model, u, maturities = draw(g, options.wide)
        run = model.characteristic_function
        exact, _ = quietly(lambda: run(u, maturities, tolerance=1e-13, scheme="graded"))  # noqa: B023
        plain, plain_warned = quietly(lambda: run(u, maturities, tolerance=tolerance))  # noqa: B023
        (checked, info), checked_warned = quietly(
            lambda: run(u, maturities, tolerance=tolerance, full_output=True)  # noqa: B023
        )
        variance = model.forward_variance.total_variance(maturities)
        floor = 30 * 2.2e-16 * (np.outer(variance, abs(u) ** 2) + 1.0) * abs(exact)
        floor = np.maximum(1e-14, floor)
        error, error_checked = abs(plain - exact), abs(checked - exact)
        above = error_checked > floor
        values += error.size
        warned += plain_warned + checked_warned
        silent_plain += 0 if plain_warned else int((error > tolerance + floor).sum())
        silent_checked += 0 if checked_warned else int((error_checked > tolerance + floor).sum())
        below += int((above & (error_checked > info.error_estimate)).sum())
        seen += int(above.sum())
        ratios.append((info.error_estimate / np.maximum(error_checked, 1e-300))[above])
        share = float((error / (tolerance + floor)).max())
        if share > worst[0]:
            parameters = (
                f"hurst {model.kernel.hurst:.4f}, vol_of_vol {model.vol_of_vol:.3f}, "
                f"correlation {model.correlation:.3f}, mean_reversion {model.mean_reversion:.2f}"
            )
            worst = (share, parameters)
    print(
        f"tolerance {tolerance:.0e}, {values} values of {options.models} models in "
        f"{time.perf_counter() - start:.0f} s: beyond it without a warning {silent_plain}, with "
        f"estimates {silent_checked}; calls that warned {warned}"
    )
    print(
        f"  estimates below the error: {below} of {seen} above the rounding floor; estimate/error "
        f"in the median {np.median(np.concatenate(ratios)):.1f}"
    )
    print(f"  worst without estimates: {worst[0]:.2f} of the tolerance, {worst[1]}")


if __name__ == "__main__":
    main()

"""The Black formula in mpmath, and points that reach every region of it."""

import mpmath as mp
import numpy as np

EPS = 2.0**-52


def black_terms(forward, strike, maturity, volatility, digits=40):
    """(out-of-the-money price, its distance to the upper bound, s * dprice/ds), all undiscounted.

    Evaluated from the definition with error functions and enough digits that the differences
    keep ``digits`` of them.
    """
    with mp.workdps(digits + 20):
        forward, strike, maturity, volatility = map(mp.mpf, (forward, strike, maturity, volatility))
        bound, other = min(forward, strike), max(forward, strike)
        s = volatility * mp.sqrt(maturity)
        a = mp.log(other / bound) / s
        near, far = (a - s / 2) / mp.sqrt(2), (a + s / 2) / mp.sqrt(2)
        price = (bound * mp.erfc(near) - other * mp.erfc(far)) / 2
        gap = (bound * mp.erfc(-near) + other * mp.erfc(far)) / 2
        return price, gap, s * bound * mp.exp(-near * near) / mp.sqrt(2 * mp.pi)


def random_points(seed, size):
    """(forward, strike, maturity, volatility) with prices from 1e-300 of the bound to all of it.

    Log-moneyness from 1e-15 to 670 and exactly zero; total volatility from 1e-8 to 50;
    standardised distances to the strike up to 37; the last digits before the upper bound.
    """
    rng = np.random.default_rng(seed)
    k = np.where(rng.random(size) < 0.9, 10 ** rng.uniform(-15, 2.83, size), 0.0)
    near = rng.random(size) < 0.3
    k = np.where(near & (k > 0), 10 ** rng.uniform(-2, 1, size), k)
    z = np.where(rng.random(size) < 0.5, rng.uniform(-8, 4, size), rng.uniform(-8, 37, size))
    root = np.sqrt(z * z + 2 * k)
    s = np.where(z > 0, 2 * k / (root + np.abs(z)), root + np.abs(z))
    free = (rng.random(size) < 0.3) | (s < 1e-8)
    s = np.where(free, 10 ** rng.uniform(-8, 1.2, size), s)
    bound = 10 ** rng.uniform(-2, 4, size)
    up = rng.random(size) < 0.5
    forward, strike = np.where(up, bound, bound * np.exp(k)), np.where(up, bound * np.exp(k), bound)
    maturity = 10 ** rng.uniform(-5, 1.5, size)
    volatility = s / np.sqrt(maturity)
    a = np.abs(np.log(strike / forward)) / s
    inside = (a - s / 2 < 36.9) & (a - s / 2 > -8.1)
    return forward[inside], strike[inside], maturity[inside], volatility[inside]

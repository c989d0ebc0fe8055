"""Models with a flat variance curve, for tests."""

import pyvolterra as pv


def flat_model(hurst=0.12, vol_of_vol=0.4, correlation=-0.7, level=0.04, mean_reversion=0.0):
    return pv.VolterraHeston(
        pv.FractionalKernel(hurst),
        vol_of_vol=vol_of_vol,
        correlation=correlation,
        mean_reversion=mean_reversion,
        forward_variance=pv.ForwardVariance.flat(level),
    )

"""Variations of a fit, and how the files of a report are read back."""

import io
import json
from dataclasses import fields, replace

import numpy as np

import pyvolterra as pv


def part(fit, mask, **changes):
    """The fit restricted to some of its quotes."""
    smiles = replace(
        fit.smiles, **{f.name: getattr(fit.smiles, f.name)[mask] for f in fields(fit.smiles)}
    )
    arrays = {n: getattr(fit, n)[mask] for n in ("model_volatility", "residuals", "weights")}
    return replace(fit, smiles=smiles, **(arrays | changes))


def with_model(fit, model):
    """The quotes of the fit against another model."""
    s = fit.smiles
    volatility = np.empty(s.mid.size)
    for t in np.unique(s.maturity):
        at = s.maturity == t
        volatility[at] = model.implied_volatility(
            s.strike[at], t, forward=s.forward[at], tolerance=1e-6
        )
    volatility = np.nan_to_num(volatility)
    return replace(
        fit, model=model, model_volatility=volatility, residuals=volatility - s.mid_volatility
    )


def replace_model(fit, **changes):
    m = fit.model
    values = {"vol_of_vol": m.vol_of_vol, "correlation": m.correlation} | changes
    return pv.VolterraHeston(
        m.kernel, forward_variance=m.forward_variance, mean_reversion=m.mean_reversion, **values
    )


def image(png):
    from matplotlib.image import imread

    return imread(io.BytesIO(png))[:, :, :3]


def strict_json(content):
    def refuse(name):
        raise AssertionError(f"{name} is not JSON")

    return json.loads(content.decode("utf-8"), parse_constant=refuse)

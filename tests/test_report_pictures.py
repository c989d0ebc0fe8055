"""The pictures of a report."""

from dataclasses import replace

import numpy as np
import pytest
from reported_fits import image, part, replace_model, strict_json, with_model

import pyvolterra as pv
from pyvolterra.report import canvas, figures, render_report, slices


def shows(pixels, colour):
    wanted = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0
    return bool(np.any(np.all(np.abs(pixels - wanted) < 0.02, axis=2)))


def test_smile_pictures_mark_the_quotes_the_model_misses(demo_fit):
    good = figures.smile_picture(slices.expiry_slices(demo_fit)[0])
    bad_fit = with_model(demo_fit, replace_model(demo_fit, correlation=0.2))
    bad = figures.smile_picture(slices.expiry_slices(bad_fit)[0])
    for png in (good, bad):
        pixels = image(png)
        assert pixels.shape[0] >= 700
        assert pixels.shape[1] >= 900
        assert shows(pixels, figures.MODEL)
    assert shows(image(bad), figures.ALERT)
    assert not shows(image(good), figures.ALERT)
    assert shows(image(good), figures.QUOTE)


def cases(fit):
    """Fits of two expiries or fewer, each with something that a plain one has not."""
    t = np.unique(fit.smiles.maturity)
    first = np.flatnonzero(fit.smiles.maturity == t[0])
    no_bid = fit.smiles.bid_volatility.copy()
    no_bid[:5] = np.nan
    classical = pv.VolterraHeston(
        pv.ConstantKernel(),
        0.4,
        0.3,
        pv.ForwardVariance.driven(
            pv.ConstantKernel(), 0.02, fit.curve_times, np.abs(fit.curve_levels)
        ),
    )
    return {
        "one expiry": part(fit, fit.smiles.maturity == t[1]),
        "three quotes": part(fit, np.isin(np.arange(fit.residuals.size), first[:3])),
        "bids below intrinsic": replace(fit, smiles=replace(fit.smiles, bid_volatility=no_bid)),
        "no skew": with_model(fit, replace_model(fit, correlation=0.0)),
        "classical": replace(
            with_model(fit, classical),
            parameters=fit.parameters | {"hurst": 0.5, "initial_variance": 0.02},
            covariance_names=(),
            covariance=np.zeros((0, 0)),
            at_bound=("hurst",),
        ),
    }


@pytest.mark.parametrize(
    "case", ["one expiry", "three quotes", "bids below intrinsic", "no skew", "classical"]
)
def test_unusual_fits_are_reported_too(two_expiries, case):
    unusual = cases(two_expiries)[case]
    contents = render_report(unusual)
    count = np.unique(unusual.smiles.maturity).size
    assert sum(name.startswith("smiles/") for name in contents) == count
    for name, content in contents.items():
        if name.endswith(".png"):
            assert image(content).std() > 0.01, name
    strict_json(contents["fit.json"])


def test_drawing_leaves_no_global_state(two_expiries):
    import matplotlib

    before = dict(matplotlib.rcParams)
    render_report(two_expiries)
    assert dict(matplotlib.rcParams) == before


def test_text_in_pictures_is_readable_on_a_telephone(two_expiries):
    from matplotlib.text import Text

    shown = 330.0  # CSS pixels of picture on a screen 390 wide, without margins and frames
    drawn = []
    new_figure = canvas.new_figure

    def kept(width, height):
        drawn.append(new_figure(width, height))
        return drawn[-1]

    parts = slices.expiry_slices(two_expiries)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(canvas, "new_figure", kept)
        patch.setattr(figures, "new_figure", kept)
        figures.smile_picture(parts[0])
        figures.smiles_picture(parts, columns=2)
        figures.bid_ask_picture(parts)
        figures.skew_picture(two_expiries, parts)
        figures.forward_volatility_picture(two_expiries, parts)
    assert len(drawn) == 5
    for figure in drawn:
        pixels_per_point = shown / figure.get_figwidth() / 72.0
        box = figure.bbox
        for text in figure.findobj(Text):
            if text.get_visible() and text.get_text():
                assert text.get_fontsize() * pixels_per_point >= 8.5, text
        for text in (*figure.texts, *(t for leg in figure.legends for t in leg.get_texts())):
            extent = text.get_window_extent()
            assert extent.x0 >= 0.0, text
            assert extent.x1 <= box.x1, text

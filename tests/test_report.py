"""The report of a fit: pictures, page, fit.json, residuals.csv, and how they reach the disk."""

import csv
import io
import json
import math
import os
import re
from dataclasses import fields, replace
from html.parser import HTMLParser

import numpy as np
import pytest

import pyvolterra as pv
from pyvolterra import black, demo
from pyvolterra.report import figures, files, render_report, slices, write_report

# The arbitrage check of a fit may say that it was a little less accurate than it aimed for.


@pytest.fixture(scope="module")
def quote_file(tmp_path_factory):
    return demo.write_demo_quotes(tmp_path_factory.mktemp("demo") / "quotes.csv")


@pytest.fixture(scope="module")
def fit(quote_file):
    return pv.calibrate(pv.read_quotes(quote_file))


@pytest.fixture(scope="module")
def contents(fit):
    return render_report(fit)


@pytest.fixture(scope="module")
def small(fit):
    """The same fit as if the file had had two expiries: quicker to draw."""
    return part(fit, np.isin(fit.smiles.maturity, np.unique(fit.smiles.maturity)[[2, 7]]))


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


# ---------------------------------------------------------------- numbers behind the pictures


def test_half_widths_say_inside_exactly_up_to_one(fit):
    worse = with_model(fit, replace_model(fit, vol_of_vol=0.5))
    for case in (fit, worse):
        scaled, within = slices.half_widths(case), slices.inside(case)
        np.testing.assert_array_equal(np.abs(scaled) <= 1.0, within)
        assert within.mean() == case.share_inside_bid_ask
    assert not slices.inside(worse).all()


def replace_model(fit, **changes):
    m = fit.model
    values = {"vol_of_vol": m.vol_of_vol, "correlation": m.correlation} | changes
    return pv.VolterraHeston(
        m.kernel, forward_variance=m.forward_variance, mean_reversion=m.mean_reversion, **values
    )


def test_slices_hold_every_fitted_quote_once_and_the_models_curve(fit):
    parts = slices.expiry_slices(fit)
    assert sum(len(s) for s in parts) == fit.residuals.size
    assert all(np.diff([s.maturity for s in parts]) > 0.0)
    for s in parts:
        on_curve = np.interp(s.log_moneyness, s.curve_log_moneyness, s.curve)
        np.testing.assert_allclose(on_curve, s.model, rtol=0, atol=2e-3)
        assert s.level == pytest.approx(np.interp(0.0, s.curve_log_moneyness, s.curve), abs=1e-3)


@pytest.mark.parametrize("hurst", [0.1, 0.3, 0.5])
def test_model_skew_at_short_maturity(hurst):
    # rho nu T^(H-1/2) / (2 sqrt(V0) Gamma(H+5/2)) as T -> 0: Short-term at-the-money asymptotics
    # under stochastic volatility models, SIAM J. Financ. Math. 10, 2019 (memory, reproduced).
    kernel = pv.ConstantKernel() if hurst == 0.5 else pv.FractionalKernel(hurst)
    model = pv.VolterraHeston(kernel, 0.1, -0.6, pv.ForwardVariance.flat(0.04))
    t = np.array([2e-3])
    limit = -0.6 * 0.1 * t ** (hurst - 0.5) / (2.0 * 0.2 * math.gamma(hurst + 2.5))
    np.testing.assert_allclose(slices.model_skew(model, t), limit, rtol=0.02)


def test_market_skew_is_the_models_plus_the_slope_of_the_residuals(fit):
    s = fit.smiles
    # mid volatilities that differ from the model's by a known line in log-moneyness
    tilted = fit.model_volatility + 0.01 + 0.05 * s.log_moneyness
    case = replace(
        fit,
        smiles=replace(s, mid_volatility=tilted, ask_volatility=tilted + 0.002),
        residuals=fit.model_volatility - tilted,
    )
    skew = slices.market_skew(fit.model, slices.expiry_slices(case))
    assert skew.maturity.size == np.unique(s.maturity).size
    expected = slices.model_skew(fit.model, skew.maturity) + 0.05
    np.testing.assert_allclose(skew.market, expected, rtol=0, atol=1e-9)
    assert np.all(skew.error < 1e-9)
    # and the true market of the demo lies within its errors of the truth
    real = slices.market_skew(fit.model, slices.expiry_slices(fit))
    truth = slices.model_skew(demo.demo_market().model, real.maturity)
    assert np.mean(np.abs(real.market - truth) <= 3.0 * real.error + 0.02 * np.abs(truth)) > 0.9


def test_curve_errors(fit):
    times = np.array([0.01, 0.2, 1.0])
    only = replace(fit, covariance_names=("initial_variance",), covariance=np.array([[4e-6]]))
    # without mean reversion xi(t) = V0 + ...: its error is that of V0
    np.testing.assert_allclose(slices.curve_errors(only, times), 2e-3, rtol=1e-6)
    # and in the last drive it is linear: the response t -> (t - start)^(H+1/2) / Gamma(H+3/2)
    last = f"drive_{fit.curve_times.size}"
    only = replace(fit, covariance_names=(last,), covariance=np.array([[1e-4]]))
    t = fit.curve_times[-1] + 0.5
    alpha = fit.model.kernel.hurst + 0.5
    response = (t - fit.curve_times[-2]) ** alpha / math.gamma(alpha + 1.0)
    error = slices.curve_errors(only, np.array([t]))
    np.testing.assert_allclose(error, 1e-2 * response, rtol=1e-6)
    np.testing.assert_array_equal(
        slices.curve_errors(replace(fit, covariance_names=()), times), np.zeros(3)
    )


def test_labels_tell_two_expiries_of_a_day_apart():
    moments = np.array(
        ["2031-05-16T13:30", "2031-05-16T20:00", "2031-05-17T16:00"], dtype="datetime64[s]"
    )
    assert slices.expiry_labels(moments) == ["2031-05-16 13:30", "2031-05-16 20:00", "2031-05-17"]
    names = files.smile_names(moments)
    assert names[0] == "smiles/smile-2031-05-16T1330.png"
    assert len(set(names)) == 3


# ---------------------------------------------------------------- pictures


def image(png):
    from matplotlib.image import imread

    return imread(io.BytesIO(png))[:, :, :3]


def shows(pixels, colour):
    wanted = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0
    return bool(np.any(np.all(np.abs(pixels - wanted) < 0.02, axis=2)))


def test_smile_pictures_mark_the_quotes_the_model_misses(fit):
    good = figures.smile_picture(slices.expiry_slices(fit)[0])
    bad_fit = with_model(fit, replace_model(fit, correlation=0.2))
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
def test_unusual_fits_are_reported_too(small, case):
    unusual = cases(small)[case]
    contents = render_report(unusual)
    count = np.unique(unusual.smiles.maturity).size
    assert sum(name.startswith("smiles/") for name in contents) == count
    for name, content in contents.items():
        if name.endswith(".png"):
            assert image(content).std() > 0.01, name
    strict_json(contents["fit.json"])


def test_drawing_leaves_no_global_state(small):
    import matplotlib

    before = dict(matplotlib.rcParams)
    render_report(small)
    assert dict(matplotlib.rcParams) == before


# ---------------------------------------------------------------- the page


class Page(HTMLParser):
    """Checks that tags close in order, and collects text, sources and headings."""

    VOID = frozenset({"meta", "img", "source", "br", "link"})

    def __init__(self):
        super().__init__()
        self.open, self.sources, self.tags, self.text, self.headings = [], [], set(), [], []

    def handle_starttag(self, tag, attrs):
        self.tags.add(tag)
        if tag not in self.VOID:
            self.open.append(tag)
        self.sources += [v for k, v in attrs if k in {"src", "srcset", "href", "data", "action"}]
        assert not [k for k, _ in attrs if k.startswith("on")]

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)
        if self.open and self.open[-1] == "h2":
            self.headings.append(data)


def parsed(html):
    page = Page()
    page.feed(html.decode("utf-8"))
    page.close()
    assert page.open == []
    page.text = " ".join(" ".join(page.text).split())
    return page


def test_page_is_whole_and_needs_nothing_else(contents):
    html = contents["report.html"]
    page = parsed(html)
    assert page.sources
    assert all(s.startswith("data:image/png;base64,") for s in page.sources)
    assert not page.tags & {"script", "link", "iframe", "object", "form"}
    assert not re.search(rb"url\(|@import|https?://", html)
    assert page.headings == [
        "Result",
        "The surface",
        "Smile by smile",
        "Forwards and discount factors",
        "Quotes set aside",
        "Cautions",
        "How this was made",
    ]


def test_page_says_what_was_fitted_and_how_well(fit, contents):
    text = parsed(contents["report.html"]).text
    assert f"{fit.quotes_read:,} quotes read" in re.sub(r"\s+", " ", text)
    assert fit.fingerprint in text
    assert f"{1e4 * fit.rms_residual:.0f} bp" in text
    assert f"{100.0 * fit.share_inside_bid_ask:.1f} %" in text
    assert "none found" in text
    for reason in {r.reason for r in fit.rejections}:
        assert reason in text
    for caution in (
        "investment advice",
        "ndependent price verification",
        "model-risk policy",
        "local regulation",
        "licensed practice",
        "extrapolated",
        "tale, thin",
    ):
        assert caution in text
    h = fit.parameters["hurst"]
    shown = re.search(r"Hurst index H ([0-9.]+) ([0-9.]+) fitted", text)
    assert shown
    assert float(shown[1]) == pytest.approx(h, abs=0.1 * fit.standard_errors["hurst"])
    assert float(shown[2]) == pytest.approx(fit.standard_errors["hurst"], rel=0.06)


def test_page_escapes_what_it_prints(small):
    evil = "<script>alert(1)</script>&\"'"
    rejection = replace(small.rejections[0], reason=evil, detail=evil, expiry=evil, side=evil)
    case = replace(small, source=evil, message=evil, rejections=(rejection,), converged=False)
    page = parsed(render_report(case)["report.html"])
    assert "script" not in page.tags
    assert page.text.count(evil) >= 6


def test_page_warns_about_this_fit(small):
    arbitrage = replace(small.arbitrage, calendar=("the call falls",), worst_calendar=-1e-3)
    case = replace(
        small,
        converged=False,
        message="gave up",
        at_bound=("hurst",),
        covariance_names=tuple(n for n in small.covariance_names if n != "hurst"),
        covariance=small.covariance[1:, 1:],
        arbitrage=arbitrage,
    )
    text = parsed(render_report(case)["report.html"]).text
    for warning in ("NOT converged", "gave up", "At a bound: hurst", "the call falls", "1 found"):
        assert warning in text
    assert re.search(r"Hurst index H [0-9.]+ – at bound", text)


# ---------------------------------------------------------------- fit.json and residuals.csv


def strict_json(content):
    def refuse(name):
        raise AssertionError(f"{name} is not JSON")

    return json.loads(content.decode("utf-8"), parse_constant=refuse)


def test_fit_json_carries_the_fit(fit, contents):
    document = strict_json(contents["fit.json"])
    assert (document["format"], document["format_version"]) == ("pyvolterra fit", 1)
    assert document["parameters"] == fit.parameters
    assert document["standard_errors"] == fit.standard_errors
    np.testing.assert_array_equal(document["covariance"]["matrix"], fit.covariance)
    assert document["quote_fingerprint_sha256"] == fit.fingerprint
    assert document["quote_time"] == "2031-05-13T15:30:00Z"
    assert {"pyvolterra", "numpy", "scipy", "python"} <= set(document["versions"])
    quality = document["quality"]
    assert quality["quotes_fitted"] == sum(e["quotes"] for e in quality["by_expiry"])
    assert sum(entry["count"] for entry in document["set_aside"]) == len(fit.rejections)
    # enough to build the fitted model again
    p, curve = document["parameters"], document["forward_variance"]
    kernel = pv.FractionalKernel(p["hurst"])
    rebuilt = pv.ForwardVariance.driven(
        kernel, curve["initial_variance"], curve["times"], curve["levels"], p["mean_reversion"]
    )
    assert rebuilt == fit.model.forward_variance


def test_fit_json_has_null_for_what_is_no_number(fit):
    errors = dict.fromkeys(fit.standard_errors, math.nan)
    case = replace(fit, standard_errors=errors, elapsed=math.inf)
    document = strict_json(files.fit_json(case))
    assert set(document["standard_errors"].values()) == {None}
    assert document["seconds"] is None


def test_residuals_point_back_to_the_file(fit, contents, quote_file):
    with open(quote_file, newline="", encoding="utf-8") as file:
        source = dict(enumerate(csv.DictReader(file), start=2))
    rows = list(csv.DictReader(io.StringIO(contents["residuals.csv"].decode("utf-8"))))
    assert len(rows) == fit.residuals.size
    forwards = {str(p.expiry) + "Z": p for p in fit.forwards.points}
    for row in rows:
        quote, point = source[int(row["row"])], forwards[row["expiry"]]
        assert quote["expiry"] == row["expiry"]
        assert float(quote["strike"]) == float(row["strike"])
        assert quote["option_type"] == row["side"][0].upper()
        for side in ("bid", "ask"):  # the volatility reprices the quote
            price = black.price(
                point.forward,
                float(row["strike"]),
                point.maturity,
                float(row[f"{side}_volatility"]),
                discount=point.discount,
                call=row["side"] == "call",
            )
            assert price == pytest.approx(float(quote[side]), abs=1e-3)
        gap = float(row["model_volatility"]) - float(row["mid_volatility"])
        assert float(row["residual_bp"]) == pytest.approx(1e4 * gap, abs=1e-2, rel=1e-3)
    inside = [row["inside_bid_ask"] == "yes" for row in rows]
    assert np.mean(inside) == fit.share_inside_bid_ask


# ---------------------------------------------------------------- writing


def names(folder):
    return sorted(p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file())


def test_write_report_replaces_an_older_one_and_nothing_else(small, tmp_path):
    folder = tmp_path / "out"
    (folder / "smiles").mkdir(parents=True)
    (folder / "smiles" / "smile-1999-01-01.png").write_bytes(b"of an older fit")
    (folder / "smiles" / "mine.png").write_bytes(b"mine")
    (folder / "fit.json").write_text("older")
    page = write_report(small, folder)
    assert page == folder / "report.html"
    left = names(folder)
    assert "smiles/mine.png" in left
    assert "smiles/smile-1999-01-01.png" not in left
    assert not [name for name in left if ".part" in name]
    strict_json((folder / "fit.json").read_bytes())
    assert len(left) == 1 + 2 + 4 + 3


@pytest.mark.parametrize("failing", ["fsync", "replace"])
def test_a_failed_write_leaves_the_folder_as_it_was(tmp_path, monkeypatch, failing):
    def fail(*arguments):
        raise OSError("no space left on device")

    folder = tmp_path / "out"
    monkeypatch.setattr(files.os, failing, fail)
    with pytest.raises(OSError, match="no space"):
        files.write_files(folder, {"a.txt": b"a", "smiles/b.txt": b"b"})
    assert not folder.exists()
    folder.mkdir()
    (folder / "a.txt").write_bytes(b"older")
    with pytest.raises(OSError, match="no space"):
        files.write_files(folder, {"a.txt": b"a", "smiles/b.txt": b"b"})
    assert names(folder) == ["a.txt"]
    assert (folder / "a.txt").read_bytes() == b"older"


def test_a_folder_in_the_way_is_found_before_anything_is_replaced(tmp_path):
    (tmp_path / "b.txt").mkdir()
    (tmp_path / "a.txt").write_bytes(b"older")
    with pytest.raises(IsADirectoryError, match=r"b\.txt"):
        files.write_files(tmp_path, {"a.txt": b"a", "b.txt": b"b"})
    assert (tmp_path / "a.txt").read_bytes() == b"older"
    assert names(tmp_path) == ["a.txt"]


def test_a_failing_picture_leaves_nothing(small, tmp_path, monkeypatch):
    def fail(*arguments, **more):
        raise RuntimeError("cannot draw")

    monkeypatch.setattr(figures, "smile_picture", fail)
    with pytest.raises(RuntimeError, match="cannot draw"):
        write_report(small, tmp_path / "out")
    assert names(tmp_path) == []


def test_check_folder(tmp_path, monkeypatch):
    files.check_folder(tmp_path)
    files.check_folder(tmp_path / "new")
    assert not (tmp_path / "new").exists()
    (tmp_path / "file").write_text("")
    with pytest.raises(NotADirectoryError, match="not a folder"):
        files.check_folder(tmp_path / "file")
    with pytest.raises(NotADirectoryError, match="parent"):
        files.check_folder(tmp_path / "file" / "out")
    with pytest.raises(FileNotFoundError, match="does not exist"):
        files.check_folder(tmp_path / "missing" / "out")
    monkeypatch.setattr(os, "access", lambda *a: False)  # root may write anywhere
    with pytest.raises(PermissionError, match="not writable"):
        files.check_folder(tmp_path)
    with pytest.raises(PermissionError, match=r"parent .* is not writable"):
        files.check_folder(tmp_path / "new")

"""The HTML page of a report."""

import re
from dataclasses import replace
from html.parser import HTMLParser

import pytest

from pyvolterra.report import render_report


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


def test_page_is_whole_and_needs_nothing_else(demo_report):
    html = demo_report["report.html"]
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


def test_page_says_what_was_fitted_and_how_well(demo_fit, demo_report):
    text = parsed(demo_report["report.html"]).text
    assert f"{demo_fit.quotes_read:,} quotes read" in re.sub(r"\s+", " ", text)
    assert demo_fit.fingerprint in text
    assert f"{1e4 * demo_fit.rms_residual:.0f} bp" in text
    assert f"{100.0 * demo_fit.share_inside_bid_ask:.1f} %" in text
    assert "none found" in text
    for reason in {r.reason for r in demo_fit.rejections}:
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
    h = demo_fit.parameters["hurst"]
    shown = re.search(r"Hurst index H ([0-9.]+) ([0-9.]+) fitted", text)
    assert shown
    assert float(shown[1]) == pytest.approx(h, abs=0.1 * demo_fit.standard_errors["hurst"])
    assert float(shown[2]) == pytest.approx(demo_fit.standard_errors["hurst"], rel=0.06)


def test_page_escapes_what_it_prints(two_expiries):
    evil = "<script>alert(1)</script>&\"'"
    rejection = replace(
        two_expiries.rejections[0], reason=evil, detail=evil, expiry=evil, side=evil
    )
    case = replace(
        two_expiries, source=evil, message=evil, rejections=(rejection,), converged=False
    )
    page = parsed(render_report(case)["report.html"])
    assert "script" not in page.tags
    assert page.text.count(evil) >= 6


def test_page_warns_about_this_fit(two_expiries):
    arbitrage = replace(two_expiries.arbitrage, calendar=("the call falls",), worst_calendar=-1e-3)
    case = replace(
        two_expiries,
        converged=False,
        message="gave up",
        at_bound=("hurst",),
        covariance_names=tuple(n for n in two_expiries.covariance_names if n != "hurst"),
        covariance=two_expiries.covariance[1:, 1:],
        arbitrage=arbitrage,
    )
    text = parsed(render_report(case)["report.html"]).text
    for warning in ("NOT converged", "gave up", "At a bound: hurst", "the call falls", "1 found"):
        assert warning in text
    assert re.search(r"Hurst index H [0-9.]+ – at bound", text)


def test_tables_stay_readable_on_a_narrow_screen(demo_report):
    html = demo_report["report.html"].decode("utf-8")
    tables = re.findall(
        r"<div class='scroll' tabindex='0'><table class='(\w+)'>(.*?)</table></div>", html
    )
    assert len(tables) == html.count("<table")
    assert {kind for kind, _ in tables} == {"rows", "columns"}
    for kind, table in tables:
        named = "<thead>" in table and kind == "rows"
        # each cell of a table that becomes blocks carries the name of its column
        assert table.count(" data-name='") == (table.count("<td") if named else 0)
        assert ("class='w'" in table) == (kind == "rows")
    narrow = html[html.index("@media (max-width: 600px)") :]
    for rule in (".rows td { display: block", "position: sticky", "attr(data-name)"):
        assert rule in narrow

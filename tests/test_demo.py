"""The demo quote file is what it says: invented, reproducible, realistic, and spoilt on purpose."""

import csv
from collections import Counter, defaultdict

import numpy as np
import pytest

from pyvolterra import demo


@pytest.fixture(scope="module")
def rows(tmp_path_factory):
    path = demo.write_demo_quotes(tmp_path_factory.mktemp("demo") / "quotes.csv")
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def test_same_seed_same_bytes(tmp_path):
    a = demo.write_demo_quotes(tmp_path / "a.csv")
    b = demo.write_demo_quotes(tmp_path / "b.csv")
    c = demo.write_demo_quotes(tmp_path / "c.csv", seed=1)
    assert a.read_bytes() == b.read_bytes()
    assert a.read_bytes() != c.read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.csv", "b.csv", "c.csv"]


def test_expiries_and_strikes(rows):
    strikes = defaultdict(set)
    for row in rows:
        strikes[row["expiry"]].add(float(row["strike"]))
    counts = sorted(len(s) for s in strikes.values())
    assert counts[0] <= 2  # the expiry with almost nothing
    assert len(counts) - 1 >= 12
    assert counts[1] >= 15
    assert counts[-1] <= 60


def test_planted_faults(rows):
    assert any(row["bid"] == "n/a" for row in rows)
    readable = [row for row in rows if row["bid"] != "n/a"]
    bids = np.array([float(row["bid"]) for row in readable])
    asks = np.array([float(row["ask"]) for row in readable])
    assert np.sum(bids > asks) >= 4
    assert np.sum(bids == 0.0) >= 4
    assert any(row["last_update"] < "2031-05-13T12" for row in rows)
    keys = Counter((row["expiry"], row["strike"], row["option_type"]) for row in rows)
    assert sum(count > 1 for count in keys.values()) >= 4


def test_the_truth_is_an_admissible_model():
    market = demo.demo_market()
    curve = market.model.forward_variance
    assert curve.is_admissible(market.model.kernel)
    levels = curve(market.maturities)
    assert 0.1 < np.sqrt(levels.min()) < np.sqrt(levels.max()) < 0.4
    assert market.maturities.shape == market.forwards.shape == market.discounts.shape


def test_a_failed_write_leaves_nothing(tmp_path):
    with pytest.raises(OSError):
        demo.write_demo_quotes(tmp_path / "missing" / "quotes.csv")
    target = tmp_path / "folder.csv"
    target.mkdir()
    with pytest.raises(OSError):
        demo.write_demo_quotes(target)
    assert [p.name for p in tmp_path.iterdir()] == ["folder.csv"]

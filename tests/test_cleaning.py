"""Every cleaning rule finds what it is for, and leaves good quotes alone."""

from dataclasses import replace

import numpy as np
import pytest
from invented_quotes import QUOTE_TIME, surface, with_changes

import pyvolterra as pv
from pyvolterra.cleaning import RULES, CleaningRules, clean_quotes, cleaning_table
from pyvolterra.quotes import Rejection


def dropped(quotes, **thresholds):
    cleaned = clean_quotes(quotes, rules=CleaningRules(**thresholds))
    assert len(cleaned) + len(cleaned.rejections) == len(quotes) + len(quotes.rejections)
    assert all(r.stage == "clean" and r.detail for r in cleaned.rejections)
    return {r.row: r.reason for r in cleaned.rejections}


def near_the_money(quotes, number=3):
    """Indices of calls of different expiries, well inside their ladders."""
    index = []
    for expiry in np.unique(quotes.expiry)[1 : number + 1]:
        ladder = np.flatnonzero((quotes.expiry == expiry) & quotes.is_call)
        index.append(ladder[ladder.size // 2])
    return np.array(index)


@pytest.mark.parametrize("noise", [0.0, 0.6, 1.0])
@pytest.mark.parametrize("seed", range(5))
def test_good_quotes_stay(seed, noise):
    # Truth within bid and ask throughout: then no arbitrage can be found.
    quotes = surface(seed, noise=noise)
    cleaned = clean_quotes(quotes, strict=True)
    assert len(cleaned) == len(quotes)
    assert cleaned.rejections == ()


@pytest.mark.parametrize(
    ("reason", "change"),
    [
        ("crossed", lambda bid, ask: (ask + 0.05, bid)),
        ("locked", lambda bid, ask: (bid, bid)),
        ("zero bid", lambda bid, ask: (0.0 * bid, ask)),
        ("no ask", lambda bid, ask: (bid, 0.0 * ask)),
        ("too wide", lambda bid, ask: (0.05 * bid, ask)),
        ("too wide", lambda bid, ask: (0.7 * bid, 1.3 * ask)),
        ("arbitrage with neighbours", lambda bid, ask: (0.7 * bid, 0.7 * ask)),
        ("arbitrage with neighbours", lambda bid, ask: (1.4 * bid, 1.4 * ask)),
    ],
)
def test_prices_that_go(reason, change):
    quotes = surface(3)
    pick = near_the_money(quotes)
    bid, ask = change(quotes.bid[pick], quotes.ask[pick])
    spoilt = with_changes(quotes, bid=(pick, bid), ask=(pick, ask))
    assert dropped(spoilt) == dict.fromkeys(quotes.row[pick].tolist(), reason)


def test_zero_bids_and_asks_together():
    quotes = surface(3)
    pick = near_the_money(quotes)
    spoilt = with_changes(quotes, bid=(pick, 0.0), ask=(pick, 0.0))
    assert dropped(spoilt) == dict.fromkeys(quotes.row[pick].tolist(), "no ask")


@pytest.mark.parametrize("factor", [0.8, 0.9, 1.15])
def test_stale_prices_are_found_by_arbitrage(factor):
    # Eight prices of another time in each of five files, no time stamp to tell; among them options
    # deep in the money and neighbours of one another.
    planted, found, good_dropped, total = 0, 0, 0, 0
    for seed in range(5):
        quotes = surface(seed)
        generator = np.random.default_rng(100 + seed)
        pick = generator.choice(np.flatnonzero(quotes.mid > 3.0), 8, replace=False)
        spoilt = with_changes(
            quotes,
            bid=(pick, factor * quotes.bid[pick]),
            ask=(pick, factor * quotes.ask[pick]),
        )
        gone = dropped(spoilt)
        assert set(gone.values()) == {"arbitrage with neighbours"}
        rows = set(quotes.row[pick].tolist())
        planted += len(rows)
        found += len(rows & set(gone))
        good_dropped += len(set(gone) - rows)
        total += len(quotes)
    assert found >= 0.9 * planted
    assert good_dropped <= 0.001 * total


def test_stale_by_last_update():
    quotes = surface(1)
    ages = np.random.default_rng(1).integers(-60, 3000, len(quotes))
    pick = near_the_money(quotes, 4)
    ages[pick] = [3700, 90_000, -400, 0]
    update = QUOTE_TIME - ages.astype("timedelta64[s]")
    update[pick[3]] = np.datetime64("NaT")  # unknown: no reason to drop
    quotes = replace(quotes, last_update=update)
    rows = quotes.row[pick].tolist()
    expected = {rows[0]: "stale", rows[1]: "stale", rows[2]: "updated after the quote time"}
    assert dropped(quotes) == expected
    assert set(dropped(quotes, max_age_seconds=4000.0)) == {rows[1], rows[2]}


def test_expiries_too_soon():
    quotes = surface(2, days=(1, 30))
    first = quotes.expiry == quotes.expiry[0]
    assert 24.0 < quotes.maturity[0] * 365.0 * 24.0 < 25.0
    assert dropped(quotes) == {}
    gone = dropped(quotes, min_maturity_hours=26.0)
    assert gone == dict.fromkeys(quotes.row[first].tolist(), "expires too soon")


def test_expiries_that_stand_for_none():
    quotes = surface(2, days=(30, 366 * 51))
    last = quotes.expiry == quotes.expiry[-1]
    gone = dropped(quotes)
    assert gone == dict.fromkeys(quotes.row[last].tolist(), "expires too far ahead")
    assert dropped(quotes, max_maturity_years=60.0) == {}


@pytest.mark.parametrize("strike", [1e300, 3e5, 15.0, 1e-300])
def test_strikes_of_another_size(strike):
    quotes = surface(3)
    assert np.median(quotes.strike) == pytest.approx(2000.0, rel=0.1)
    pick = near_the_money(quotes)
    spoilt = with_changes(quotes, strike=(pick, strike * np.array([1.0, 1.01, 1.02])))
    assert dropped(spoilt) == dict.fromkeys(quotes.row[pick].tolist(), "absurd strike")
    with pytest.raises(pv.QuoteError, match=r"absurd strike: .* within a factor 100 of the median"):
        clean_quotes(spoilt, strict=True)
    # two quotes whose middle would overflow
    clean = with_changes(quotes, strike=(np.arange(len(quotes)), 1.7e308)).select(
        np.arange(len(quotes)) < 2
    )
    with pytest.raises(pv.QuoteError, match="none of 2 quotes survives"):
        clean_quotes(clean)


@pytest.mark.parametrize("unit", [1e150, 1e-150])
def test_a_file_of_absurd_strikes_throughout(unit):
    quotes = surface(3)
    names = ("strike", "bid", "ask")
    spoilt = replace(quotes, **{name: unit * getattr(quotes, name) for name in names})
    with pytest.raises(pv.QuoteError, match=rf"\({len(quotes)} absurd strike\)"):
        clean_quotes(spoilt)
    with pytest.raises(pv.QuoteError, match=r"strike is .*, must be between 1e-30 and 1e\+30"):
        clean_quotes(spoilt, strict=True)


@pytest.mark.parametrize(("bid", "ask"), [(1e6, 1.1e6), (1.5e308, 1.7e308), (0.0, 1e-7)])
def test_prices_of_another_size(bid, ask):
    quotes = surface(3)
    pick = near_the_money(quotes)
    spoilt = with_changes(quotes, bid=(pick, bid), ask=(pick, ask))
    assert dropped(spoilt) == dict.fromkeys(quotes.row[pick].tolist(), "absurd price")


def duplicated(quotes, source, *, bid=None, ask=None, update=None):
    """Append copies of the quotes at ``source`` with other prices."""
    arrays = {}
    for name in ("expiry", "maturity", "strike", "is_call", "bid", "ask"):
        array = getattr(quotes, name)
        arrays[name] = np.concatenate([array, array[source]])
    arrays["row"] = np.arange(arrays["bid"].size) + 2
    n = len(quotes)
    if bid is not None:
        arrays["bid"][n:] = bid
    if ask is not None:
        arrays["ask"][n:] = ask
    if update is not None:
        arrays["last_update"] = update
    return replace(quotes, **arrays)


def test_duplicates():
    quotes = surface(4)
    pick = near_the_money(quotes)
    n = len(quotes)
    first, copies = quotes.row[pick].tolist(), [n + 2, n + 3, n + 4]
    exact = duplicated(quotes, pick)
    assert dropped(exact) == dict.fromkeys(copies, "duplicate")
    width = (quotes.ask - quotes.bid)[pick]
    tighter = duplicated(quotes, pick, bid=quotes.bid[pick] + 0.2 * width)
    assert dropped(tighter) == dict.fromkeys(first, "duplicate")
    # a newer one counts though wider; an undated one does not
    update = np.full(n + 3, QUOTE_TIME - np.timedelta64(100, "s"))
    update[n:] = [QUOTE_TIME, QUOTE_TIME - np.timedelta64(200, "s"), np.datetime64("NaT")]
    dated = duplicated(quotes, pick, ask=quotes.ask[pick] + 0.2 * width, update=update)
    gone = dropped(dated)
    assert gone == dict.fromkeys([first[0], copies[1], copies[2]], "duplicate")


def test_an_expiry_with_almost_nothing():
    quotes = surface(5)
    expiries = np.unique(quotes.expiry)
    thin = quotes.expiry == expiries[3]
    members = np.flatnonzero(thin & quotes.is_call & (quotes.strike > 2050.0))
    keep = ~thin
    keep[members[:2]] = True
    gone = dropped(quotes.select(keep))
    assert gone == dict.fromkeys(quotes.row[members[:2]].tolist(), "too few strikes")
    keep[members[2]] = True
    assert dropped(quotes.select(keep)) == {}
    # in-the-money quotes do not count where the sides can be told apart
    keep = ~thin
    keep[np.flatnonzero(thin & (np.abs(quotes.strike - 2000.0) < 20.0))[:1]] = True
    keep[np.flatnonzero(thin & quotes.is_call & (quotes.strike < 1900.0))] = True
    keep[np.flatnonzero(thin & ~quotes.is_call & (quotes.strike < 1900.0))[-1]] = True
    gone = dropped(quotes.select(keep))
    assert set(gone.values()) == {"too few strikes"}
    assert set(gone) == set(quotes.row[keep & thin].tolist())


def test_every_rule_has_its_reason_and_words():
    reasons = [reason for reason, _ in RULES]
    assert len(set(reasons)) == len(reasons)
    assert all(rule.__doc__ for _, rule in RULES)


def test_strict_names_the_lowest_row():
    quotes = surface(6)
    pick = near_the_money(quotes)
    spoilt = with_changes(quotes, bid=(pick[:1], 0.0), ask=(pick[1:], 0.01))
    row = int(quotes.row[pick].min())
    with pytest.raises(pv.QuoteError, match=rf"^invented.csv, row {row}: zero bid: bid is 0 "):
        clean_quotes(spoilt, strict=True)


def test_nothing_left():
    quotes = surface(6)
    dead = replace(quotes, bid=np.zeros(len(quotes)))
    words = rf"none of {len(quotes)} quotes survives the cleaning \({len(quotes)} zero bid\)"
    with pytest.raises(pv.QuoteError, match=words):
        clean_quotes(dead)


def test_earlier_rejections_are_kept_and_tabled():
    def record(row, stage, reason):
        return Rejection(row, "", np.nan, "", stage, reason, "because")

    parse = tuple(record(row, "parse", "not a number") for row in (9, 3))
    quotes = replace(surface(7), rejections=parse)
    pick = near_the_money(quotes)
    cleaned = clean_quotes(with_changes(quotes, bid=(pick, 0.0)))
    assert cleaned.rejections[:2] == parse
    rows = ", ".join(str(row) for row in sorted(quotes.row[pick]))
    assert cleaning_table(cleaned.rejections) == [
        ("parse", "not a number", 2, "3, 9"),
        ("clean", "zero bid", 3, rows),
    ]
    many = [record(row, "clean", "stale") for row in range(2, 12)]
    assert cleaning_table([*many, record(1, "clean", "crossed")]) == [
        ("clean", "stale", 10, "2, 3, 4, 5, 6, …"),
        ("clean", "crossed", 1, "1"),
    ]
    assert cleaning_table([]) == []

"""Reading quote files: what is accepted, set aside and refused, each with its row."""

import subprocess
import sys
from datetime import UTC, date, datetime

import numpy as np
import pyarrow as arrow
import pytest
from pyarrow import parquet

import pyvolterra as pv
from pyvolterra.quotes import read_quotes

HEADER = "quote_time,expiry,strike,option_type,bid,ask"
GOOD = "2031-05-13T15:30:00Z,2031-06-20T16:00:00Z,100,C,1.5,1.75"


def write(tmp_path, *lines, name="quotes.csv", end="\n"):
    path = tmp_path / name
    path.write_bytes((end.join(lines) + end).encode())
    return path


def test_values_and_types(tmp_path):
    path = write(
        tmp_path,
        HEADER,
        GOOD,
        "2031-05-13T15:30:00Z,2032-05-12T15:30:00Z,105.5,put,0,2e0",
        "2031-05-13 15:30,2031-06-20, 90 ,Call,12,12.5",
        "2031-05-13T11:30:00.250-04:00,2031-06-20T12:00-04:00,95,P,.5,.75",
    )
    quotes = read_quotes(path)
    assert quotes.rejections == ()
    assert len(quotes) == 4
    assert quotes.source == "quotes.csv"
    assert quotes.quote_time == np.datetime64("2031-05-13T15:30:00")
    assert quotes.expiry.dtype == np.dtype("datetime64[s]")
    same = np.datetime64("2031-06-20T16:00:00")
    assert quotes.expiry.tolist() == [x.item() for x in (same, quotes.expiry[1], same, same)]
    np.testing.assert_array_equal(quotes.row, [2, 3, 4, 5])
    np.testing.assert_array_equal(quotes.strike, [100.0, 105.5, 90.0, 95.0])
    np.testing.assert_array_equal(quotes.is_call, [True, False, True, False])
    np.testing.assert_array_equal(quotes.mid, [1.625, 1.0, 12.25, 0.625])
    # ACT/365F: 365 days to the second are one year; 38 days and half an hour.
    np.testing.assert_allclose(quotes.maturity[:2], [(38 + 0.5 / 24) / 365, 1.0], rtol=1e-15)
    assert quotes.last_update is None


@pytest.mark.parametrize(
    ("moment", "instant"),
    [
        ("2031-05-13", "2031-05-13T16:00:00"),  # a date alone is 16:00 UTC
        ("2031-05-13T15:30", "2031-05-13T15:30:00"),
        ("2031-05-13T15:30:59.999", "2031-05-13T15:30:59"),
        ("2031-05-14T00:30:00+09:00", "2031-05-13T15:30:00"),
        ("20310513T153000Z", "2031-05-13T15:30:00"),
    ],
)
def test_times(tmp_path, moment, instant):
    quotes = read_quotes(write(tmp_path, HEADER, GOOD.replace("2031-05-13T15:30:00Z", moment)))
    assert quotes.quote_time == np.datetime64(instant)


def test_order_extra_columns_quotation_and_byte_order_mark(tmp_path):
    path = tmp_path / "quotes.csv"
    text = (
        'ask,"bid",note,last_update,option_type, strike ,expiry,quote_time\r\n'
        '1.75,1.5,"a, b",2031-05-13T15:29:00Z,C,100,2031-06-20,2031-05-13T15:30:00Z\r\n'
        "1.85,1.6,,,p,100,2031-06-20,2031-05-13T15:30:00Z\r\n"
    )
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())
    quotes = read_quotes(path)
    assert quotes.rejections == ()
    np.testing.assert_array_equal(quotes.bid, [1.5, 1.6])
    np.testing.assert_array_equal(quotes.strike, [100.0, 100.0])
    assert quotes.last_update[0] == np.datetime64("2031-05-13T15:29:00")
    assert np.isnat(quotes.last_update[1])


BAD_CELLS = [
    ("bid", "n/a", "not a number", "bid is 'n/a', must be a number"),
    ("bid", "1_000", "not a number", "bid is '1_000', must be a number"),
    ("bid", "", "empty cell", "bid is empty, must be a number"),
    ("ask", "nan", "not finite", "ask is 'nan', must be a finite number"),
    ("ask", "inf", "not finite", "ask is 'inf', must be a finite number"),
    ("bid", "-0.5", "negative", "bid is -0.5, must not be negative"),
    ("strike", "0", "not positive", "strike is 0, must be positive"),
    ("strike", "-100", "negative", "strike is -100, must not be negative"),
    ("option_type", "X", "unknown option type", "option_type is 'X', must be one of C, P"),
    ("option_type", "", "unknown option type", "option_type is '', must be one of C, P"),
    ("expiry", "20/06/2031", "not a time", "expiry is '20/06/2031', must be an ISO 8601"),
    ("expiry", "", "empty cell", "expiry is empty, must be an ISO 8601 time"),
    ("expiry", "2031-05-13T15:30:00Z", "expired", "must be after the quote time 2031-05-13T15:30"),
    ("expiry", "2030-06-20", "expired", "expiry is 2030-06-20T16:00:00Z, must be after"),
    ("quote_time", "now", "not a time", "quote_time is 'now', must be an ISO 8601"),
    ("quote_time", "2031-05-12T15:30Z", "other quote time", "that of most rows 2031-05-13T15:30"),
    ("last_update", "noon", "not a time", "last_update is 'noon', must be an ISO 8601"),
]


@pytest.mark.parametrize(("column", "value", "reason", "words"), BAD_CELLS)
def test_a_bad_cell_is_set_aside_with_its_row(tmp_path, column, value, reason, words):
    names = [*HEADER.split(","), "last_update"]
    cells = dict(zip(names, [*GOOD.split(","), ""], strict=True))
    cells[column] = value
    good = GOOD + ","
    bad = ",".join(cells.values())
    path = write(tmp_path, HEADER + ",last_update", good, " ", ",,,,,,", good, bad, good)
    quotes = read_quotes(path)
    np.testing.assert_array_equal(quotes.row, [2, 5, 7])  # rows 3 and 4 are blank
    (rejection,) = quotes.rejections
    assert (rejection.row, rejection.stage, rejection.reason) == (6, "parse", reason)
    assert words in rejection.detail
    if column != "strike":
        assert rejection.strike == 100.0
    if column != "option_type":
        assert rejection.side == "call"
    if column not in ("expiry", "quote_time"):
        assert rejection.expiry == "2031-06-20T16:00:00Z"
    with pytest.raises(pv.QuoteError, match=r"quotes\.csv, row 6: ") as refused:
        read_quotes(path, strict=True)
    assert words in str(refused.value)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        (GOOD.replace("1.75", '1"75'), "ask is '1\"75', must be a number"),
        (GOOD.replace("C", '"C'), "the line is not CSV"),
        (GOOD.rpartition(",")[0], "5 cells, must be 6 as in the header"),
        (GOOD.replace("100", "4,100.5"), "7 cells, must be 6 as in the header"),
    ],
)
def test_a_mangled_line_spoils_no_other(tmp_path, line, words):
    quotes = read_quotes(write(tmp_path, HEADER, GOOD, line, GOOD, GOOD))
    np.testing.assert_array_equal(quotes.row, [2, 4, 5])
    (rejection,) = quotes.rejections
    assert rejection.row == 3
    assert words in rejection.detail


@pytest.mark.parametrize(
    ("header", "words"),
    [
        (HEADER.replace("strike", "strke"), r"missing column strike \(is it 'strke'\?\); found: q"),
        (HEADER.replace("bid", "Bid"), r"missing column bid \(is it 'Bid'\?\)"),
        (HEADER.replace(",bid", ",zzz"), "missing column bid; found: quote_time, expiry, strike, "),
        ("a,b", "missing columns quote_time, expiry, strike, option_type, bid, ask; found: a, b"),
        (HEADER + ",bid", "column bid appears 2 times"),
        (HEADER.replace(",", ";"), "must be separated by commas, not by ';'"),
    ],
)
def test_columns_are_always_fatal(tmp_path, header, words):
    with pytest.raises(pv.QuoteError, match=words):
        read_quotes(write(tmp_path, header, GOOD))


def test_long_texts_are_cut_in_messages(tmp_path):
    header = ",".join(f"column_{k}_{50 * 'x'}" for k in range(300))
    with pytest.raises(pv.QuoteError, match=r"found: column_0_x.*… \(290 more\)$") as refused:
        read_quotes(write(tmp_path, header, "1"))
    assert len(str(refused.value)) < 700
    with pytest.raises(pv.QuoteError, match="strike is 'x") as refused:
        read_quotes(write(tmp_path, HEADER, GOOD.replace("100", 10_000 * "x")), strict=True)
    assert len(str(refused.value)) < 250


def test_nothing_to_read(tmp_path):
    for content in (b"", b" \n\n", b"\xef\xbb\xbf"):
        path = tmp_path / "empty.csv"
        path.write_bytes(content)
        with pytest.raises(pv.QuoteError, match=r"empty\.csv: the file is empty"):
            read_quotes(path)
    with pytest.raises(pv.QuoteError, match="a header and no rows"):
        read_quotes(write(tmp_path, HEADER))
    bad = GOOD.replace("1.5", "?")
    with pytest.raises(pv.QuoteError, match=r"none of the 2 rows is usable.* row 2: bid is '\?'"):
        read_quotes(write(tmp_path, HEADER, bad, bad))
    with pytest.raises(FileNotFoundError, match=r"missing\.csv does not exist"):
        read_quotes(tmp_path / "missing.csv")
    with pytest.raises(IsADirectoryError, match="is a directory"):
        read_quotes(tmp_path)
    with pytest.raises(TypeError, match="path must be a string or a path, got NoneType"):
        read_quotes(None)
    with pytest.raises(ValueError, match="path is empty"):
        read_quotes("")


def test_not_text(tmp_path):
    path = tmp_path / "latin.csv"
    path.write_bytes(f"{HEADER}\n{GOOD}\n{GOOD}".encode() + b"\xe9\n")
    with pytest.raises(pv.QuoteError, match=r"latin\.csv, row 3: not UTF-8 text"):
        read_quotes(path)
    with pytest.raises(pv.QuoteError, match="row 1: the header is not CSV"):
        read_quotes(write(tmp_path, '"' + HEADER, GOOD))


def test_several_snapshots_without_a_majority(tmp_path):
    later = GOOD.replace("15:30:00Z", "15:31:00Z", 1)
    with pytest.raises(
        pv.QuoteError,
        match=r"2 different quote times .* \(row 2 has 2031-05-13T15:30:00Z, "
        r"row 4 has 2031-05-13T15:31:00Z\); a file holds one snapshot",
    ):
        read_quotes(write(tmp_path, HEADER, GOOD, GOOD, later, later))


def test_a_hundred_thousand_rows(tmp_path):
    lines = [GOOD.replace(",100,", f",{k + 1},") for k in range(100_000)]
    lines[77_777] = GOOD.replace("1.5", "x")
    quotes = read_quotes(write(tmp_path, HEADER, *lines))
    assert len(quotes) == 99_999
    assert [r.row for r in quotes.rejections] == [77_779]
    np.testing.assert_array_equal(quotes.strike, quotes.row - 1.0)


def test_select_and_shapes(tmp_path):
    quotes = read_quotes(write(tmp_path, HEADER, GOOD, GOOD, GOOD))
    reject = quotes.rejection(1, "crossed", "because")
    fewer = quotes.select([True, False, True], [reject])
    np.testing.assert_array_equal(fewer.row, [2, 4])
    assert fewer.rejections == (reject,)
    assert (reject.row, reject.side, reject.strike) == (3, "call", 100.0)
    assert (reject.expiry, reject.stage) == ("2031-06-20T16:00:00Z", "clean")
    with pytest.raises(ValueError, match=r"mask must have the shape \(3,\), got \(2,\)"):
        quotes.select([True, False])
    with pytest.raises(TypeError, match="mask must hold booleans"):
        quotes.select([0, 2])
    with pytest.raises(ValueError, match=r"bid must have the shape of row, \(3,\), got \(2,\)"):
        pv.Quotes(
            quotes.quote_time,
            quotes.row,
            quotes.expiry,
            quotes.maturity,
            quotes.strike,
            quotes.is_call,
            quotes.bid[:2],
            quotes.ask,
            "arrays",
        )


class TestParquet:
    def save(self, path, columns):
        parquet.write_table(arrow.table(columns), path)
        return path

    def test_typed_columns(self, tmp_path):
        moment = datetime(2031, 5, 13, 15, 30, tzinfo=UTC)
        path = self.save(
            tmp_path / "q.parquet",
            {
                "quote_time": arrow.array([moment] * 4, arrow.timestamp("ns", "America/New_York")),
                "expiry": arrow.array([date(2031, 6, 20)] * 4),
                "strike": arrow.array([90, 100, 110, 120]),
                "option_type": arrow.array(["C", "P", "c", "put"]).dictionary_encode(),
                "bid": [1.0, float("nan"), None, 2.0],
                "ask": arrow.array([2.0, 2.0, 2.0, 3.0], arrow.float32()),
                "note": [{"a": 1}] * 4,
            },
        )
        quotes = read_quotes(path)
        np.testing.assert_array_equal(quotes.row, [2, 5])
        assert [(r.row, r.reason) for r in quotes.rejections] == [
            (3, "not finite"),
            (4, "empty cell"),
        ]
        assert quotes.quote_time == np.datetime64("2031-05-13T15:30:00")
        assert quotes.expiry[0] == np.datetime64("2031-06-20T16:00:00")
        with pytest.raises(pv.QuoteError, match="row 3: bid is nan"):
            read_quotes(path, strict=True)

    @pytest.mark.parametrize(
        ("kind", "day", "huge"),
        [
            (arrow.timestamp("s"), 86_400, 2**62 // 1000),  # times 10**6 wraps round to 1969
            (arrow.timestamp("ms", "Mars/Phobos"), 86_400_000, 2**62),
            (arrow.timestamp("us"), 86_400_000_000, 2**62),
            (arrow.timestamp("us", "UTC"), 86_400_000_000, -(2**62)),
            (arrow.date32(), 1, 2**31 - 1),
            (arrow.date64(), 86_400_000, 86_400_000 * 10**9),
        ],
    )
    def test_a_time_out_of_range_costs_its_own_row(self, tmp_path, kind, day, huge):
        columns = {
            "quote_time": [datetime(2031, 5, 13, 15, 30, tzinfo=UTC)] * 3,
            "expiry": arrow.array([22_450 * day, huge, 22_451 * day], kind),  # June 2031 but one
            "strike": [90.0, 100.0, 110.0],
            "option_type": ["C"] * 3,
            "bid": [1.0] * 3,
            "ask": [2.0] * 3,
        }
        quotes = read_quotes(self.save(tmp_path / "q.parquet", columns))
        assert [(r.row, r.reason) for r in quotes.rejections] == [(3, "not a time")]
        np.testing.assert_array_equal(quotes.row, [2, 4])
        assert np.all((quotes.maturity > 0.1) & (quotes.maturity < 0.2))
        with pytest.raises(pv.QuoteError, match=r"q\.parquet, row 3: expiry is '-?\d+ of type "):
            read_quotes(tmp_path / "q.parquet", strict=True)
        columns["expiry"] = arrow.array([huge] * 3, kind)
        with pytest.raises(pv.QuoteError, match=r"none of the 3 rows is usable.*: expiry is "):
            read_quotes(self.save(tmp_path / "q.parquet", columns))

    def test_text_columns_and_any_suffix(self, tmp_path):
        lines = [GOOD, GOOD.replace("100", "101"), GOOD.replace("1.5", "?")]
        names = HEADER.split(",")
        cells = zip(*(line.split(",") for line in lines), strict=True)
        columns = {name: list(column) for name, column in zip(names, cells, strict=True)}
        binary = read_quotes(self.save(tmp_path / "quotes.dat", columns))
        text = read_quotes(write(tmp_path, HEADER, *lines))
        for name in ("row", "expiry", "maturity", "strike", "is_call", "bid", "ask"):
            np.testing.assert_array_equal(getattr(binary, name), getattr(text, name))
        assert binary.rejections == text.rejections

    def test_refusals(self, tmp_path):
        columns = {name: ["x"] for name in HEADER.replace("strike", "stike").split(",")}
        with pytest.raises(pv.QuoteError, match=r"missing column strike \(is it 'stike'\?\)"):
            read_quotes(self.save(tmp_path / "q.parquet", columns))
        broken = tmp_path / "broken.parquet"
        broken.write_bytes(b"PAR1 and nothing else")
        with pytest.raises(pv.QuoteError, match=r"broken\.parquet: not a readable Parquet file"):
            read_quotes(broken)
        broken.write_text(HEADER)
        with pytest.raises(pv.QuoteError, match="not a Parquet file"):
            read_quotes(broken)


def test_parquet_without_pyarrow(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    path = tmp_path / "q.parquet"
    path.write_bytes(b"PAR1....PAR1")
    with pytest.raises(pv.MissingDependencyError, match=r'pip install "pyvolterra\[desk\]"'):
        read_quotes(path)


def test_csv_needs_no_desk_package(tmp_path):
    path = write(tmp_path, HEADER, GOOD)
    code = (
        "import sys, pyvolterra as pv; pv.read_quotes(sys.argv[1]); "
        "print({'pandas', 'pyarrow'} & set(sys.modules))"
    )
    result = subprocess.run(
        [sys.executable, "-P", "-c", code, str(path)], capture_output=True, text=True, check=True
    )
    assert result.stdout.strip() == "set()"

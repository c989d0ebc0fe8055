"""Reading option quotes from CSV or Parquet; bad rows are set aside with row number and reason."""

import csv
import difflib
import io
import math
import os
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, date, datetime, time
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import MissingDependencyError, QuoteError

__all__ = ["Quotes", "Rejection", "read_quotes"]

COLUMNS = ("quote_time", "expiry", "strike", "option_type", "bid", "ask")
OPTIONAL_COLUMNS = ("last_update",)
SIDES = {"c": True, "call": True, "p": False, "put": False}
# A date without a time of day means this time, in UTC.
TIME_OF_PURE_DATE = time(16, 0, tzinfo=UTC)
SECONDS_PER_YEAR = 365.0 * 86400.0  # ACT/365F
PARQUET_MAGIC = b"PAR1"

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
TimeArray = NDArray[np.datetime64]


@dataclass(frozen=True)
class Rejection:
    """One quote that was read and not used.

    Attributes
    ----------
    row : int
        Row of the file, the header being row 1 (the first row of data is 2).
    expiry, side : str
        Expiry as an ISO 8601 instant, and ``"call"`` or ``"put"``; empty where unreadable.
    strike : float
        nan where unreadable.
    stage : str
        ``"parse"`` (the row is not a quote) or ``"clean"`` (a quote that should not be fitted).
    reason : str
        Short category, such as ``"not a number"``, ``"crossed"``, ``"stale"``.
    detail : str
        One sentence with the values and the rule.
    """

    row: int
    expiry: str
    strike: float
    side: str
    stage: str
    reason: str
    detail: str


@dataclass(frozen=True, eq=False)
class Quotes:
    """Option quotes of one underlying at one time, one element of each array per quote.

    Attributes
    ----------
    quote_time : numpy.datetime64
        Instant of the snapshot, UTC, in seconds.
    row : ndarray of int64, shape (n,)
        Row of the file each quote came from, the header being row 1.
    expiry : ndarray of datetime64[s], shape (n,)
        Expiry instants, UTC.
    maturity : ndarray of float64, shape (n,)
        Years from the quote time to the expiry, ACT/365F between the instants.
    strike, bid, ask : ndarray of float64, shape (n,)
        In the currency unit of the file.
    is_call : ndarray of bool, shape (n,)
        True for a call, False for a put.
    source : str
        Name of the file, without its directory.
    rejections : tuple of Rejection
        What has been set aside so far.
    last_update : ndarray of datetime64[s], shape (n,), or None
        When each quote last changed, NaT where unknown; None if the file does not say.

    Raises
    ------
    ValueError
        If the arrays are not one-dimensional and of one length (the message names the array).
    """

    quote_time: np.datetime64
    row: IntArray
    expiry: TimeArray
    maturity: FloatArray
    strike: FloatArray
    is_call: BoolArray
    bid: FloatArray
    ask: FloatArray
    source: str
    rejections: tuple[Rejection, ...] = ()
    last_update: TimeArray | None = None

    def __post_init__(self) -> None:
        for name, array in self._arrays().items():
            if np.shape(array) != (self.row.size,):
                raise ValueError(
                    f"{name} must have the shape of row, ({self.row.size},), got {np.shape(array)}"
                )

    def _arrays(self) -> dict[str, NDArray[Any]]:
        names = ("row", "expiry", "maturity", "strike", "is_call", "bid", "ask")
        arrays: dict[str, NDArray[Any]] = {name: getattr(self, name) for name in names}
        if self.last_update is not None:
            arrays["last_update"] = self.last_update
        return arrays

    def __len__(self) -> int:
        return int(self.row.size)

    @property
    def mid(self) -> FloatArray:
        """Halfway between bid and ask."""
        return 0.5 * (self.bid + self.ask)

    def select(self, mask: ArrayLike, extra_rejections: Iterable[Rejection] = ()) -> "Quotes":
        """The quotes where ``mask`` is true, with more rejections on record.

        Parameters
        ----------
        mask : array_like of bool, shape (n,)
            Which quotes to keep.
        extra_rejections : iterable of Rejection
            Appended to ``rejections``.

        Returns
        -------
        Quotes

        Raises
        ------
        ValueError
            If the mask has another shape.
        TypeError
            If it does not hold booleans.
        """
        keep = np.asarray(mask)
        if keep.dtype != np.bool_:
            raise TypeError(f"mask must hold booleans, got dtype {keep.dtype}")
        if keep.shape != (len(self),):
            raise ValueError(f"mask must have the shape ({len(self)},), got {keep.shape}")
        kept: dict[str, Any] = {name: array[keep] for name, array in self._arrays().items()}
        return replace(self, **kept, rejections=(*self.rejections, *extra_rejections))

    def rejection(self, index: int, reason: str, detail: str) -> Rejection:
        """A record of why the quote at ``index`` is not to be fitted (stage ``"clean"``)."""
        return Rejection(
            row=int(self.row[index]),
            expiry=f"{self.expiry[index]}Z",
            strike=float(self.strike[index]),
            side="call" if self.is_call[index] else "put",
            stage="clean",
            reason=reason,
            detail=detail,
        )


def read_quotes(path: str | os.PathLike[str], *, strict: bool = False) -> Quotes:
    """Read a snapshot of option quotes from a CSV or Parquet file.

    Parameters
    ----------
    path : path-like
        CSV: UTF-8 with or without byte-order mark, comma-separated, one quote a line. Parquet is
        recognised by its content and needs pyarrow. Columns, in any order, others being ignored:

        ``quote_time``
            Time of the snapshot, the same in every row.
        ``expiry``
            Expiry instant; after the quote time.
        ``strike``
            Positive number.
        ``option_type``
            ``C``, ``P``, ``call`` or ``put``, in any case.
        ``bid``, ``ask``
            Zero or positive numbers.
        ``last_update`` (optional)
            Time the quote last changed; may be empty.

        Times are ISO 8601. A time without a zone is UTC, one with an offset is converted; a date
        alone means 16:00 UTC of that day. Fractions of a second are dropped.
    strict : bool, default False
        Raise at the first bad row. By default bad rows are set aside in ``rejections``, each with
        its row, column, value and rule.

    Returns
    -------
    Quotes
        In the order of the file.

    Raises
    ------
    QuoteError
        A column is missing or doubled, the file is empty or not readable as CSV or Parquet, no row
        is usable, no quote time is shared by more than half of the rows, or ``strict`` and a row is
        bad.
    FileNotFoundError, IsADirectoryError
        There is no such file, or it is a directory.
    MissingDependencyError
        A Parquet file, and pyarrow is not installed.

    Notes
    -----
    About 1 s for 100,000 rows. Rows with another quote time than the majority's are set
    aside. Thread-safe.
    """
    file = Path(os.fspath(path))
    if file.is_dir():
        raise IsADirectoryError(f"{file} is a directory; a CSV or Parquet file of quotes is needed")
    if not file.exists():
        raise FileNotFoundError(f"{file} does not exist; a CSV or Parquet file of quotes is needed")
    content = file.read_bytes()
    if not content.strip():
        raise QuoteError(f"{file.name}: the file is empty")
    if content.startswith(PARQUET_MAGIC):
        rows = _parquet_rows(content, file.name)
    elif file.suffix.lower() in {".parquet", ".pq"}:
        raise QuoteError(f"{file.name}: not a Parquet file, it does not begin with PAR1")
    else:
        rows = _csv_rows(content, file.name)

    parser = _RowParser()
    parsed: list[_Row] = []
    rejections: list[Rejection] = []
    for number, cells in rows:
        try:
            parsed.append(parser.parse(number, cells))
        except _BadRowError as bad:
            rejections.append(parser.rejection(number, cells, bad))
            if strict:
                break
    if not (parsed or rejections):
        raise QuoteError(f"{file.name}: the file has a header and no rows of quotes")
    snapshot, strangers = _one_snapshot(parsed, file.name)
    for row in strangers:
        detail = (
            f"quote_time is {_iso(row.quote_time)}, and that of most rows {_iso(snapshot)}; a file "
            "holds one snapshot (per-quote times belong in last_update)"
        )
        side = "call" if row.is_call else "put"
        rejections.append(
            Rejection(
                row.number, _iso(row.expiry), row.strike, side, "parse", "other quote time", detail
            )
        )
    rejections.sort(key=lambda rejection: rejection.row)
    if strict and rejections:
        raise QuoteError(f"{file.name}, row {rejections[0].row}: {rejections[0].detail}")
    used = [row for row in parsed if row.quote_time == snapshot]
    if not used:
        first = rejections[0]
        raise QuoteError(
            f"{file.name}: none of the {len(rejections)} rows is usable; "
            f"the first, row {first.row}: {first.detail}"
        )
    return _quotes(used, snapshot, file.name, tuple(rejections), parser.has_updates)


# Cells by column name of one row, or what is wrong with the row as a whole.
_Cells = dict[str, Any]


@dataclass(frozen=True, slots=True)
class _Row:
    number: int
    quote_time: datetime
    expiry: datetime
    strike: float
    is_call: bool
    bid: float
    ask: float
    last_update: datetime | None


class _BadRowError(Exception):
    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason, self.detail = reason, detail


class _RowParser:
    """Turns cells into values; every distinct time is parsed once."""

    def __init__(self) -> None:
        self.times: dict[Any, datetime] = {}
        self.has_updates = False

    def parse(self, number: int, cells: _Cells) -> _Row:
        if "" in cells:
            raise _BadRowError("wrong number of cells", cells[""])
        quote_time = self._time("quote_time", cells["quote_time"])
        expiry = self._time("expiry", cells["expiry"])
        strike = _number("strike", cells["strike"])
        if strike == 0.0:
            raise _BadRowError("not positive", "strike is 0, must be positive")
        is_call = _side(cells["option_type"])
        bid = _number("bid", cells["bid"])
        ask = _number("ask", cells["ask"])
        if expiry <= quote_time:
            raise _BadRowError(
                "expired",
                f"expiry is {_iso(expiry)}, must be after the quote time {_iso(quote_time)}",
            )
        last_update = None
        if "last_update" in cells:
            self.has_updates = True
            if not _is_blank(cells["last_update"]):
                last_update = self._time("last_update", cells["last_update"])
        return _Row(number, quote_time, expiry, strike, is_call, bid, ask, last_update)

    def rejection(self, number: int, cells: _Cells, bad: _BadRowError) -> Rejection:
        """The record of a bad row, with as much of the quote as can be read."""
        known: dict[str, Any] = {"expiry": "", "strike": math.nan, "side": ""}
        readers: dict[str, Callable[[], Any]] = {
            "expiry": lambda: _iso(self._time("expiry", cells["expiry"])),
            "strike": lambda: _number("strike", cells["strike"]),
            "side": lambda: "call" if _side(cells["option_type"]) else "put",
        }
        for name, read in readers.items():
            try:
                known[name] = read()
            except (_BadRowError, KeyError):
                continue
        return Rejection(number, **known, stage="parse", reason=bad.reason, detail=bad.detail)

    def _time(self, column: str, value: Any) -> datetime:
        try:
            return self.times[value]
        except (KeyError, TypeError):
            pass
        if _is_blank(value):
            raise _BadRowError("empty cell", f"{column} is empty, must be an ISO 8601 time")
        moment = _moment(value)
        if moment is None:
            raise _BadRowError(
                "not a time",
                f"{column} is {value!r}, must be an ISO 8601 date or time such as "
                "2031-05-13T15:30:00Z",
            )
        self.times[value] = moment
        return moment


def _is_blank(value: Any) -> bool:
    return value is None or (isinstance(value, str) and not value.strip())


def _moment(value: Any) -> datetime | None:
    # A UTC time of whole seconds, or None.
    if isinstance(value, str):
        text = value.strip()
        try:
            value = date.fromisoformat(text)
        except ValueError:
            try:
                value = datetime.fromisoformat(text)
            except ValueError:
                return None
    if isinstance(value, datetime):
        moment = value if value.tzinfo else value.replace(tzinfo=UTC)
    elif isinstance(value, date):
        moment = datetime.combine(value, TIME_OF_PURE_DATE)
    else:
        return None
    try:
        return moment.astimezone(UTC).replace(microsecond=0)
    except OverflowError:
        return None


def _number(column: str, value: Any) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        if _is_blank(value):
            raise _BadRowError("empty cell", f"{column} is empty, must be a number") from None
        raise _BadRowError("not a number", f"{column} is {value!r}, must be a number") from None
    # Python reads 1_000 as 1000 and True as 1; no file means that.
    if isinstance(value, bool) or (isinstance(value, str) and "_" in value):
        raise _BadRowError("not a number", f"{column} is {value!r}, must be a number")
    if not math.isfinite(number):
        raise _BadRowError("not finite", f"{column} is {value!r}, must be a finite number")
    if number < 0.0:
        raise _BadRowError("negative", f"{column} is {value}, must not be negative")
    return number


def _side(value: Any) -> bool:
    is_call = SIDES.get(str(value).strip().lower())
    if is_call is None:
        raise _BadRowError(
            "unknown option type", f"option_type is {value!r}, must be one of C, P, call, put"
        )
    return is_call


def _iso(moment: datetime) -> str:
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def _one_snapshot(rows: Sequence[_Row], source: str) -> tuple[datetime, list[_Row]]:
    # The quote time of the majority, and the rows that have another.
    if not rows:
        return datetime.min.replace(tzinfo=UTC), []
    counts = Counter(row.quote_time for row in rows)
    snapshot, count = counts.most_common(1)[0]
    if 2 * count <= len(rows):
        first = {moment: row.number for row in reversed(rows) for moment in [row.quote_time]}
        shown = sorted(first.items(), key=lambda item: item[1])[:3]
        examples = ", ".join(f"row {number} has {_iso(moment)}" for moment, number in shown)
        raise QuoteError(
            f"{source}: {len(counts)} different quote times and none shared by more than half of "
            f"the rows ({examples}); a file holds one snapshot (per-quote times belong in "
            "last_update)"
        )
    return snapshot, [row for row in rows if row.quote_time != snapshot]


def _quotes(
    rows: Sequence[_Row],
    snapshot: datetime,
    source: str,
    rejections: tuple[Rejection, ...],
    has_updates: bool,
) -> Quotes:
    def instants(moments: Iterable[datetime | None]) -> TimeArray:
        naive = [moment and moment.replace(tzinfo=None) for moment in moments]
        return np.array(naive, dtype="datetime64[s]")

    quote_time = instants([snapshot])[0]
    expiry = instants(row.expiry for row in rows)
    seconds = (expiry - quote_time).astype(np.float64)
    return Quotes(
        quote_time=quote_time,
        row=np.array([row.number for row in rows], dtype=np.int64),
        expiry=expiry,
        maturity=seconds / SECONDS_PER_YEAR,
        strike=np.array([row.strike for row in rows]),
        is_call=np.array([row.is_call for row in rows]),
        bid=np.array([row.bid for row in rows]),
        ask=np.array([row.ask for row in rows]),
        source=source,
        rejections=rejections,
        last_update=instants(row.last_update for row in rows) if has_updates else None,
    )


def _columns(found: Sequence[str], source: str, hint: str = "") -> dict[str, int]:
    # Place of each column in the file; a missing or doubled one is fatal.
    for name in (*COLUMNS, *OPTIONAL_COLUMNS):
        if found.count(name) > 1:
            raise QuoteError(f"{source}: column {name} appears {found.count(name)} times")
    missing = [name for name in COLUMNS if name not in found]
    if missing:
        others = {name.lower(): name for name in found if name not in COLUMNS}
        words = []
        for name in missing:
            close = difflib.get_close_matches(name, others, n=1, cutoff=0.6)
            words.append(f"{name} (is it {others[close[0]]!r}?)" if close else name)
        raise QuoteError(
            f"{source}: missing column{'s' if len(missing) > 1 else ''} {', '.join(words)}; "
            f"found: {', '.join(found)}{hint}"
        )
    return {n: found.index(n) for n in (*COLUMNS, *OPTIONAL_COLUMNS) if n in found}


def _csv_rows(content: bytes, source: str) -> Iterator[tuple[int, _Cells]]:
    # One line is one row, so that a stray quotation mark spoils its own row only.
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = content.count(b"\n", 0, error.start) + 1
        raise QuoteError(
            f"{source}, row {row}: not UTF-8 text; a CSV or Parquet file of quotes is needed"
        ) from None
    if not text.strip():
        raise QuoteError(f"{source}: the file is empty")
    lines = io.StringIO(text, newline=None)
    try:
        header = [name.strip() for name in _cells_of(next(lines))]
    except csv.Error as error:
        raise QuoteError(f"{source}, row 1: the header is not CSV ({error})") from None
    separators = [mark for mark in ";\t|" if len(header) == 1 and mark in header[0]]
    hint = f" (cells must be separated by commas, not by {separators[0]!r})" if separators else ""
    columns = _columns(header, source, hint)

    def rows() -> Iterator[tuple[int, _Cells]]:
        for number, line in enumerate(lines, start=2):
            try:
                cells = _cells_of(line)
            except csv.Error as error:
                yield number, {"": f"the line is not CSV ({error})"}
                continue
            if not any(cells):
                continue
            if len(cells) < len(header) or any(cells[len(header) :]):
                yield number, {"": f"{len(cells)} cells, must be {len(header)} as in the header"}
            else:
                yield number, {name: cells[place] for name, place in columns.items()}

    return rows()


def _cells_of(line: str) -> list[str]:
    line = line.rstrip("\n")
    return next(csv.reader((line,), strict=True)) if '"' in line else line.split(",")


def _parquet_rows(content: bytes, source: str) -> Iterator[tuple[int, _Cells]]:
    try:
        import pyarrow as arrow
        import pyarrow.parquet as parquet
    except ImportError:
        raise MissingDependencyError(
            f"reading the Parquet file {source} needs pyarrow, which is not installed: "
            'pip install "pyvolterra[desk]"'
        ) from None
    try:
        file = parquet.ParquetFile(io.BytesIO(content))
        names = _columns([str(name) for name in file.schema_arrow.names], source)
        table = file.read(columns=list(names))
    except (arrow.ArrowException, OSError) as error:
        raise QuoteError(f"{source}: not a readable Parquet file ({error})") from None
    lists = {}
    for name in names:
        column = table.column(name)
        if arrow.types.is_timestamp(column.type):  # to UTC; Python times end at microseconds
            column = column.cast(arrow.timestamp("us"), safe=False)
        lists[name] = column.to_pylist()
    return (
        (number, dict(zip(lists, values, strict=True)))
        for number, values in enumerate(zip(*lists.values(), strict=True), start=2)
    )

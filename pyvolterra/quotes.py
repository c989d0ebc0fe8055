"""Reading option quotes from CSV or Parquet; bad rows are set aside with row number and reason."""

import os
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import QuoteError
from .quote_file import read_rows
from .quote_row import BadRowError, Row, RowParser, iso

__all__ = ["Quotes", "Rejection", "read_quotes"]

SECONDS_PER_YEAR = 365.0 * 86400.0  # ACT/365F

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
    TypeError, ValueError
        ``path`` is not a string or path, or empty.
    MissingDependencyError
        A Parquet file, and pyarrow is not installed.

    Notes
    -----
    About 1 s for 100,000 rows. Rows with another quote time than the majority's are set
    aside. Thread-safe.
    """
    if not isinstance(path, (str, os.PathLike)):
        raise TypeError(f"path must be a string or a path, got {type(path).__name__}")
    if not os.fspath(path):
        raise ValueError("path is empty, must name a CSV or Parquet file of quotes")
    file = Path(path)
    parser = RowParser()
    parsed: list[Row] = []
    rejections: list[Rejection] = []
    for number, cells in read_rows(file):
        try:
            parsed.append(parser.parse(number, cells))
        except BadRowError as bad:
            known = parser.readable(cells)
            rejections.append(Rejection(number, *known, "parse", bad.reason, bad.detail))
            if strict:
                break
    if not (parsed or rejections):
        raise QuoteError(f"{file.name}: the file has a header and no rows of quotes")
    snapshot, strangers = _one_snapshot(parsed, file.name)
    for row in strangers:
        detail = (
            f"quote_time is {iso(row.quote_time)}, and that of most rows {iso(snapshot)}; a file "
            "holds one snapshot (per-quote times belong in last_update)"
        )
        side = "call" if row.is_call else "put"
        rejections.append(
            Rejection(
                row.number, iso(row.expiry), row.strike, side, "parse", "other quote time", detail
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


def _one_snapshot(rows: Sequence[Row], source: str) -> tuple[datetime, list[Row]]:
    # The quote time of the majority, and the rows that have another.
    if not rows:
        return datetime.min.replace(tzinfo=UTC), []
    counts = Counter(row.quote_time for row in rows)
    snapshot, count = counts.most_common(1)[0]
    if 2 * count <= len(rows):
        first = {moment: row.number for row in reversed(rows) for moment in [row.quote_time]}
        shown = sorted(first.items(), key=lambda item: item[1])[:3]
        examples = ", ".join(f"row {number} has {iso(moment)}" for moment, number in shown)
        raise QuoteError(
            f"{source}: {len(counts)} different quote times and none shared by more than half of "
            f"the rows ({examples}); a file holds one snapshot (per-quote times belong in "
            "last_update)"
        )
    return snapshot, [row for row in rows if row.quote_time != snapshot]


def _quotes(
    rows: Sequence[Row],
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

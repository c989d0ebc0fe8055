"""From the cells of one row of a quote file to values, or to what is wrong with them."""

import math
from contextlib import suppress
from dataclasses import dataclass
from datetime import UTC, date, datetime, time
from typing import Any

from .quote_file import Cells, clipped

SIDES = {"c": True, "call": True, "p": False, "put": False}
# A date without a time of day means this time, in UTC.
TIME_OF_PURE_DATE = time(16, 0, tzinfo=UTC)


@dataclass(frozen=True, slots=True)
class Row:
    """One row of the file, read; times are UTC."""

    number: int
    quote_time: datetime
    expiry: datetime
    strike: float
    is_call: bool
    bid: float
    ask: float
    last_update: datetime | None


class BadRowError(Exception):
    """A row that is not a quote, with a short reason and a sentence."""

    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason, self.detail = reason, detail


class RowParser:
    """Turns cells into values; every distinct time is parsed once."""

    def __init__(self) -> None:
        self.times: dict[Any, datetime] = {}
        self.has_updates = False

    def parse(self, number: int, cells: Cells) -> Row:
        """The values of a row, or BadRowError for its first bad cell."""
        if "" in cells:
            raise BadRowError("wrong number of cells", cells[""])
        quote_time = self._time("quote_time", cells["quote_time"])
        expiry = self._time("expiry", cells["expiry"])
        strike = _number("strike", cells["strike"])
        if strike == 0.0:
            raise BadRowError("not positive", "strike is 0, must be positive")
        is_call = _side(cells["option_type"])
        bid = _number("bid", cells["bid"])
        ask = _number("ask", cells["ask"])
        if expiry <= quote_time:
            raise BadRowError(
                "expired",
                f"expiry is {iso(expiry)}, must be after the quote time {iso(quote_time)}",
            )
        last_update = None
        if "last_update" in cells:
            self.has_updates = True
            if not _is_blank(cells["last_update"]):
                last_update = self._time("last_update", cells["last_update"])
        return Row(number, quote_time, expiry, strike, is_call, bid, ask, last_update)

    def readable(self, cells: Cells) -> tuple[str, float, str]:
        """Expiry, strike and side of a bad row, as far as each can be read."""
        expiry, strike, side = "", math.nan, ""
        with suppress(BadRowError, KeyError):
            expiry = iso(self._time("expiry", cells["expiry"]))
        with suppress(BadRowError, KeyError):
            strike = _number("strike", cells["strike"])
        with suppress(BadRowError, KeyError):
            side = "call" if _side(cells["option_type"]) else "put"
        return expiry, strike, side

    def _time(self, column: str, value: Any) -> datetime:
        try:
            return self.times[value]
        except (KeyError, TypeError):
            pass
        if _is_blank(value):
            raise BadRowError("empty cell", f"{column} is empty, must be an ISO 8601 time")
        moment = _moment(value)
        if moment is None:
            raise BadRowError(
                "not a time",
                f"{column} is {_shown(value)}, must be an ISO 8601 date or time such as "
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
    except (TypeError, ValueError, OverflowError):
        if _is_blank(value):
            raise BadRowError("empty cell", f"{column} is empty, must be a number") from None
        raise BadRowError(
            "not a number", f"{column} is {_shown(value)}, must be a number"
        ) from None
    # Python reads 1_000 as 1000 and True as 1; no file means that.
    if isinstance(value, bool) or (isinstance(value, str) and "_" in value):
        raise BadRowError("not a number", f"{column} is {_shown(value)}, must be a number")
    if not math.isfinite(number):
        raise BadRowError("not finite", f"{column} is {_shown(value)}, must be a finite number")
    if number < 0.0:
        raise BadRowError("negative", f"{column} is {clipped(str(value))}, must not be negative")
    return number


def _shown(value: Any) -> str:
    return clipped(repr(value), 120)


def _side(value: Any) -> bool:
    is_call = SIDES.get(str(value).strip().lower())
    if is_call is None:
        raise BadRowError(
            "unknown option type",
            f"option_type is {_shown(value)}, must be one of C, P, call, put",
        )
    return is_call


def iso(moment: datetime) -> str:
    """ISO 8601, in UTC to the second."""
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")

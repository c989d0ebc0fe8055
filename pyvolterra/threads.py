"""How many threads a call may use when it does not say."""

from ._validation import positive_integer

_default = 1


def default_threads() -> int:
    """Threads of a call without ``threads=``: 1 unless :func:`set_default_threads` changed it."""
    return _default


def set_default_threads(count: int) -> None:
    """Set the process-wide default number of threads.

    Parameters
    ----------
    count : int
        At least 1.

    Notes
    -----
    Threads live only as long as a call, so forking is safe at any time; results are the same bit
    for bit for any number of them.
    """
    global _default
    _default = positive_integer(count, "count")

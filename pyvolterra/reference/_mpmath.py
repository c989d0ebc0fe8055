"""mpmath, imported on demand."""

from typing import Any


def load_mpmath() -> Any:
    """The module mpmath; ImportError saying what to install when it is absent."""
    try:
        import mpmath
    except ImportError as error:
        raise ImportError('this oracle needs mpmath: pip install "pyvolterra[test]"') from error
    return mpmath

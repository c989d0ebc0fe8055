"""The warning of a tolerance that was not met, pointed at the caller's own line."""

import sys
import warnings
from types import FrameType

from .errors import AccuracyWarning


def warn_of_accuracy(message: str) -> None:
    """Emit an AccuracyWarning for the first caller outside the package."""
    warnings.warn(message, AccuracyWarning, stacklevel=_outside_package())


def _outside_package() -> int:
    level = 1
    frame: FrameType | None = sys._getframe(1)
    while frame is not None and frame.f_globals.get("__name__", "").startswith("pyvolterra."):
        level, frame = level + 1, frame.f_back
    return level

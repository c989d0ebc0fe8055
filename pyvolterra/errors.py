"""The errors and warnings that are pyvolterra's own."""

__all__ = ["AccuracyWarning", "MissingDependencyError", "MomentExplosionError", "QuoteError"]


class QuoteError(ValueError):
    """Option quotes that cannot be used.

    The message names the file, the row and column where that is known, and the rule that is
    broken.
    """


class MomentExplosionError(ValueError):
    """The transform was asked for outside the strip where the moment is finite.

    E[exp(p X_T)] is infinite for p below or above the critical moments of the maturity; the message
    names the argument, the maturity and the strip.
    """


class AccuracyWarning(UserWarning):
    """The requested tolerance could not be met; the message gives the error that was reached."""


class MissingDependencyError(ImportError):
    """An optional package is absent; the message names it and the command that installs it."""

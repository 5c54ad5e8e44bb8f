"""Errors, as a line for people and an exit code for scripts."""

from __future__ import annotations

import nightfold.errors as errors

USAGE, NOT_FOUND, NEEDS_UPGRADE, REFUSED, BROKEN = 2, 3, 4, 5, 70

_CODES: tuple[tuple[type[Exception], int], ...] = (
    (errors.StoreOutdated, NEEDS_UPGRADE),
    (errors.StoreTooNew, NEEDS_UPGRADE),
    (errors.StoreMissing, NOT_FOUND),
    (errors.NotFound, NOT_FOUND),
    (errors.ChoiceNeeded, USAGE),
    (errors.FitError, USAGE),
    (errors.NightfoldError, REFUSED),
)


class UsageError(Exception):
    """A command was asked for something that it cannot do; found after its arguments were parsed."""


def explain(error: Exception) -> tuple[str, int]:
    """Return what to say about an error, and the exit code.

    Our own errors speak for themselves. Of the system's we name file and reason. What is left is a fault of
    the program, and says so.
    """
    if isinstance(error, UsageError):
        return str(error), USAGE
    for kind, code in _CODES:
        if isinstance(error, kind):
            return _sentence(error), code
    if isinstance(error, FileNotFoundError):
        return _system(error), NOT_FOUND
    if isinstance(error, OSError):
        return _system(error), REFUSED
    first = str(error).partition("\n")[0]
    return (
        f"this is a fault of nightfold itself ({type(error).__name__}: {first}); "
        "the same command with --debug shows where",
        BROKEN,
    )


def _sentence(error: Exception) -> str:
    """Return the message of one of our errors; those that are lookup errors too must not be quoted."""
    text = str(error.args[0]) if error.args else type(error).__name__
    return "; ".join(part.strip() for part in text.split("\n") if part.strip())


def _system(error: OSError) -> str:
    """Return file and reason of an error of the system."""
    reason = error.strerror or str(error)
    return f"{error.filename}: {reason}" if error.filename else reason

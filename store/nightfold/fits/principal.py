"""The one estimate to show where there is room for one: what the model is about."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches

from nightfold.errors import NotFound
from nightfold.fits.request import Request


def principal_estimate(request: Request) -> str:
    """Return the estimate that a model is about: the first position, rate, frequency or time that is not fixed."""
    names = [theta.name for theta in request.layout.shape.theta if theta.name in request.layout.names]
    free = [name for name in names if name not in request.fixed]
    return next(iter([*free, *request.layout.free_names, *request.layout.names]))


def chosen_estimate(known: Iterable[str], request: Request, asked: str | None) -> str:
    """Return the estimate asked for, or the one that the model is about.

    Raises
    ------
    NotFound
        If the model has no such estimate.
    """
    names = list(known)
    if asked is None:
        return principal_estimate(request)
    if asked not in names:
        near = get_close_matches(asked, names, n=1, cutoff=0.6)
        hint = f"did you mean {near[0]}?" if near else f"there are {', '.join(names)}"
        raise NotFound(f"{request.model}: no estimate {asked!r}; {hint}")
    return asked

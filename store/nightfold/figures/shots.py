"""The shots of a fit as they are drawn: used ones, means of repeats, outliers, those set aside."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from nightfold.errors import FitError

if TYPE_CHECKING:
    from nightfold.fits.result import FitResult

Floats = NDArray[np.float64]
_SAME = 1e-6  # of the span: x closer together than this are one point, as in scans


@dataclass(frozen=True)
class Marks:
    """Positions of marks, and the length of the bar either way; nan for none."""

    x: Floats
    y: Floats
    bar: Floats

    def __len__(self) -> int:
        return len(self.x)


@dataclass(frozen=True)
class Shots:
    """What is drawn: single shots that were used, their means, and those that were not used."""

    single: Marks
    means: Marks
    outliers: Marks
    aside: Marks

    @property
    def repeated(self) -> bool:
        """Whether any point has several shots."""
        return len(self.means) < len(self.single)


def gather(result: FitResult, stderr: ArrayLike | None, aside: tuple[ArrayLike, ArrayLike] | None) -> Shots:
    """Return the shots of a fit; see `fit_figure` for the arguments.

    Raises
    ------
    FitError
        When there is not a stderr for each point handed in to the fit.
    """
    bars = np.full(result.n, np.nan)
    if stderr is not None:
        given, used = _numbers("stderr", stderr), np.asarray(result.used)
        if given.ndim != 1 or (len(used) and len(given) <= used.max()):
            raise FitError(
                f"figure: found {given.size} stderr, wanted one for each point handed in to the fit"
            )
        bars = given[used]
    single = Marks(result.x, result.y, bars)
    left = (np.empty(0), np.empty(0)) if aside is None else (_numbers("x", aside[0]), _numbers("y", aside[1]))
    return Shots(single, _means(single), _bare(result.outlier_x, result.outlier_y), _bare(*left))


def _numbers(what: str, values: ArrayLike) -> Floats:
    try:
        return np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise FitError(
            f"figure: {what}: found values that are not numbers, wanted an array of numbers"
        ) from None


def _bare(x: Floats, y: Floats) -> Marks:
    known = np.isfinite(x) & np.isfinite(y)
    return Marks(x[known], y[known], np.full(int(known.sum()), np.nan))


def _means(single: Marks) -> Marks:
    """Return the mean at each x, with its standard uncertainty: from the scatter, else that of the one shot."""
    order = np.argsort(single.x, kind="stable")
    x = single.x[order]
    span = float(np.ptp(x)) if len(x) else 0.0
    places = np.split(order, np.flatnonzero(np.diff(x) > _SAME * span) + 1) if len(x) else []
    means, bars = [], []
    for place in places:
        values = single.y[place]
        means.append(values.mean())
        alone = len(place) == 1
        bars.append(single.bar[place[0]] if alone else values.std(ddof=1) / np.sqrt(len(place)))
    return Marks(np.array([single.x[place].mean() for place in places]), np.array(means), np.array(bars))

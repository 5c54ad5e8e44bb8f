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
    groups = _groups(result.x)
    single = Marks(result.x, result.y, _deviations(result, groups, stderr))
    left = (np.empty(0), np.empty(0)) if aside is None else (_numbers("x", aside[0]), _numbers("y", aside[1]))
    outliers = _bare(result.outlier_x, result.outlier_y)
    return Shots(single, _means(single, groups), outliers, _bare(*left))


def _groups(x: Floats) -> list[NDArray[np.intp]]:
    """Return the shots of each point, in rising order of x."""
    if not len(x):
        return []
    order = np.argsort(x, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(x[order]) > _SAME * np.ptp(x)) + 1)


def _deviations(result: FitResult, groups: list[NDArray[np.intp]], stderr: ArrayLike | None) -> Floats:
    """Return the standard deviation of each shot; nan where nothing is known of it."""
    given = np.full(result.n, np.nan)
    if stderr is not None:
        handed, used = _numbers("stderr", stderr), np.asarray(result.used)
        if handed.ndim != 1 or (len(used) and len(handed) <= used.max()):
            raise FitError(
                f"figure: found {handed.size} stderr, wanted one for each point handed in to the fit"
            )
        given = handed[used]
    if np.isfinite(result.deviation).all():
        return result.deviation
    spare = result.n - len(groups)
    if not spare:
        return given
    squares = sum(float(np.sum((result.y[group] - result.y[group].mean()) ** 2)) for group in groups)
    return np.full(result.n, np.sqrt(squares / spare))


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


def _means(single: Marks, groups: list[NDArray[np.intp]]) -> Marks:
    """Return the mean at each x with its standard uncertainty."""
    bars = [np.sqrt(np.mean(single.bar[group] ** 2) / len(group)) for group in groups]
    return Marks(
        np.array([single.x[group].mean() for group in groups]),
        np.array([single.y[group].mean() for group in groups]),
        np.array(bars),
    )

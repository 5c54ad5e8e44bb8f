"""Points of a scan: shots at the same settings, with mean and scatter."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd
Setting = float | str | bool


@dataclass(frozen=True, slots=True)
class Reading:
    """An observable at one point.

    Attributes
    ----------
    count : int
        Shots with a finite value.
    mean : float
        Their mean, nan for none.
    scatter : float
        Their standard deviation; nan for fewer than two.
    stderr : float
        Standard uncertainty of the mean: from the scatter, or that of a single shot if given; else nan.
    """

    count: int
    mean: float
    scatter: float
    stderr: float


@dataclass(frozen=True, slots=True)
class Point:
    """Shots at the same settings.

    Attributes
    ----------
    at : tuple of float, str or bool
        One setting an axis.
    shots : int
        All shots of the point.
    readings : mapping of str to Reading
        By observable.
    """

    at: tuple[Setting, ...]
    shots: int
    readings: Mapping[str, Reading]


def points_of(table: pd.DataFrame, axes: Sequence[str], observables: Sequence[str]) -> list[Point]:
    """Return the points of a scan's table, in rising order of the axes; shots without a setting are left out.

    Parameters
    ----------
    table : DataFrame
        A row a shot, as `Scan.table` gives it.
    axes, observables : sequence of str
        Columns to group by, columns to average.
    """
    from nightfold.scans.columns import encode

    columns = [encode(table[axis].tolist()) for axis in axes]
    groups: dict[tuple[int, ...], list[int]] = {}
    for row in range(len(table)):
        groups.setdefault(tuple(int(column.codes[row]) for column in columns), []).append(row)
    values = {name: (_numbers(table, name), _numbers(table, f"{name}_stderr")) for name in observables}
    return [
        Point(
            tuple(_setting(column.values[code]) for column, code in zip(columns, codes, strict=True)),
            len(rows),
            {name: _reading(*values[name], rows) for name in observables},
        )
        for codes, rows in sorted(groups.items())
        if -1 not in codes
    ]


def _setting(value: Any) -> Setting:
    """Return a number, truth or text of Python."""
    plain: Setting = value.item() if hasattr(value, "item") else value
    return plain


def _reading(values: Sequence[float], stderrs: Sequence[float], rows: Sequence[int]) -> Reading:
    """Return mean and scatter over some rows."""
    kept = [row for row in rows if math.isfinite(values[row])]
    count = len(kept)
    if not count:
        return Reading(0, math.nan, math.nan, math.nan)
    if count == 1:
        return Reading(1, values[kept[0]], math.nan, stderrs[kept[0]])
    mean, scatter = mean_and_scatter([values[row] for row in kept])
    return Reading(count, mean, scatter, scatter / math.sqrt(count))


def mean_and_scatter(values: Sequence[float]) -> tuple[float, float]:
    """Return mean and standard deviation (n - 1) of finite numbers, however large; infinite where no float holds it."""
    count = len(values)
    size = 2.0 ** max(0, math.frexp(max(map(abs, values)))[1] - 400)  # exact, and 1 for all but huge numbers
    small = [value / size for value in values]
    mean = math.fsum(small) / count
    scatter = math.sqrt(math.fsum((value - mean) ** 2 for value in small) / (count - 1))
    return mean * size, scatter * size


def _numbers(table: pd.DataFrame, name: str) -> list[float]:
    """Return a column as numbers, nan where there is none."""
    if name not in table:
        return [math.nan] * len(table)
    return [float(value) if _is_number(value) else math.nan for value in table[name].tolist()]


def _is_number(value: Any) -> bool:
    """Return whether a value is a number, and not a truth."""
    return isinstance(value, int | float) and not isinstance(value, bool)

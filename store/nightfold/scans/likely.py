"""Which of the parameters that move in a scan were swept on purpose, where nobody has said so."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from nightfold.scans.columns import Column, encode

FEWEST_CHANGES = 3
MANY_SHOTS = 5


def likely_axes(columns: Mapping[str, Sequence[Any]]) -> list[str]:
    """Return the parameters that were probably swept, the most varied first.

    Left out, as long as others remain, are

    - what never takes a value twice while others do (a shot counter, the temperature of the room), and what only ever
      rises or falls from shot to shot while others go to and fro;
    - what changes fewer than 3 times: that is an edit in the middle of a scan.

    Parameters
    ----------
    columns : mapping of name to (n,) sequence
        Values of the parameters that move, in the order of taking.
    """
    encoded = {name: encode(values) for name, values in columns.items()}
    names = sorted(encoded, key=lambda name: (-encoded[name].points, name))
    names = _unless_empty([name for name in names if not _never_repeats(encoded[name])], names)
    names = _unless_empty([name for name in names if not _one_way(encoded[name])], names)
    return _unless_empty([name for name in names if _changes(encoded[name]) >= FEWEST_CHANGES], names[:1])


def _unless_empty(some: list[str], otherwise: list[str]) -> list[str]:
    return some or otherwise


def _never_repeats(column: Column) -> bool:
    return len(column.codes) >= MANY_SHOTS and column.points == len(column.codes)


def _one_way(column: Column) -> bool:
    """Whether a number changes at every shot, always in the same direction."""
    steps = np.diff(column.codes)
    return _never_repeats(column) and column.numeric and bool((steps > 0).all() or (steps < 0).all())


def _changes(column: Column) -> int:
    return int(np.count_nonzero(np.diff(column.codes)))

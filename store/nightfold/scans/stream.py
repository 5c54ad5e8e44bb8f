"""The shots of one stream (one machine and sequence), as folding sees them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from math import isfinite

NUMBER = "u:"
"""What the tokens of numbers begin with."""

Point = tuple[float | str, ...]


@dataclass(frozen=True, slots=True)
class StreamShot:
    """One shot of a stream.

    Attributes
    ----------
    id : int
        Any number that names the shot; found scans are given back as these.
    started_us : int
        Start, microseconds since the epoch.
    swept : frozenset of str
        Parameters declared as swept; may be empty.
    values : mapping of str to str
        Parameter -> token; equal tokens mean equal settings. Tokens of numbers are ``u:`` and their ``repr``, as
        `nightfold.settings` writes them; they are also used as numbers (is this point on the grid of that scan?).
    changed : frozenset of str
        Names whose token differs from the shot before in the list, names that appeared or vanished included;
        empty for the first shot.
    """

    id: int
    started_us: int
    swept: frozenset[str]
    values: Mapping[str, str]
    changed: frozenset[str]


@dataclass(frozen=True, slots=True)
class FoundScan:
    """A scan found in a stream.

    Attributes
    ----------
    shot_ids : tuple of int
        Its shots, in order of start.
    axes : tuple of str
        Its swept parameters. Found: without those that move along with others, most points first.
        Declared: as declared, by name.
    origin : str
        ``found`` or ``declared``.
    """

    shot_ids: tuple[int, ...]
    axes: tuple[str, ...]
    origin: str


@lru_cache(maxsize=1 << 16)
def read_token(token: str | None) -> float | str:
    """Return a token as a number where it is one and finite, else as it stands; empty for none."""
    if token is None:
        return ""
    if not token.startswith(NUMBER):
        return token
    try:
        number = float(token.removeprefix(NUMBER))
    except ValueError:
        return token
    return number if isfinite(number) else token


def moved_names(shots: Sequence[StreamShot], start: int, stop: int) -> frozenset[str]:
    """Return the names that moved within a stretch of shots (not on entering it)."""
    return frozenset().union(*(shot.changed for shot in shots[start + 1 : stop]))


def columns_of(shots: Sequence[StreamShot], names: Iterable[str]) -> dict[str, list[float | str]]:
    """Return the values of some parameters over consecutive shots, one list a name."""
    return {name: _column(shots, name) for name in names}


def _column(shots: Sequence[StreamShot], name: str) -> list[float | str]:
    column: list[float | str] = []
    value: float | str | None = None
    for shot in shots:
        if value is None or name in shot.changed:
            value = read_token(shot.values.get(name))
        column.append(value)
    return column


class Run:
    """The shots ``first`` to ``stop`` (exclusive) of a stream, without a pause; their settings are read once."""

    def __init__(self, shots: Sequence[StreamShot], first: int, stop: int) -> None:
        self.shots = shots
        self.first = first
        self.stop = stop
        self._columns: dict[str, list[float | str]] = {}

    def columns(self, names: Iterable[str], start: int, stop: int) -> dict[str, list[float | str]]:
        """Return the values of some parameters over shots of the run, one list a name."""
        columns = {}
        for name in names:
            if name not in self._columns:
                self._columns[name] = _column(self.shots[self.first : self.stop], name)
            columns[name] = self._columns[name][start - self.first : stop - self.first]
        return columns

    def points(self, axes: Sequence[str], start: int, stop: int) -> list[Point]:
        """Return the points that shots of the run were taken at; none for shots outside of it."""
        start = max(start, self.first)
        return list(zip(*self.columns(axes, start, stop).values(), strict=True))

"""What differs between two runs of a sequence: steps aligned in order, then setting by setting.

Steps are aligned by their names (``evaporate#2`` counts as ``evaporate``), as many as possible in order; where there
is a choice, as among repetitions of a step, those that are most alike are paired: the longest common subsequence by
dynamic programming, with likeness to decide between equals (Needleman and Wunsch, J. Mol. Biol. 48, 443, 1970).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

from nightfold.errors import UnitError
from nightfold.ledger.structure import DURATION, StepNames
from nightfold.units import conversion

Kind = Literal["kept", "moved", "renamed", "added", "removed"]
ALIKE = 0.6


@dataclass(frozen=True, slots=True)
class Stated:
    """A setting as one shot has it: its value, and its unit (empty for none)."""

    value: float | int | str | bool
    unit: str

    def same(self, other: Stated) -> bool:
        """Return whether two settings are equal, whatever their units."""
        if type(self.value) is str or type(other.value) is str or self.unit == other.unit:
            return repr(self.value) == repr(other.value)
        try:
            return repr(conversion(self.unit, other.unit).value(float(self.value))) == repr(
                float(other.value)
            )
        except UnitError:
            return False


@dataclass(frozen=True)
class Run:
    """A shot to be compared: the steps of its version, and its settings by the name of the parameter."""

    steps: tuple[StepNames, ...]
    settings: Mapping[str, Stated]

    @cached_property
    def contents(self) -> tuple[dict[str, Stated], ...]:
        """The settings of each step that have a value, the duration first."""
        return tuple(
            {
                name: self.settings[step.parameter(name)]
                for name in (DURATION, *step.settings)
                if step.parameter(name) in self.settings
            }
            for step in self.steps
        )

    @property
    def others(self) -> dict[str, Stated]:
        """The settings that belong to no step."""
        own = {step.parameter(name) for step in self.steps for name in (DURATION, *step.settings)}
        return {name: stated for name, stated in self.settings.items() if name not in own}


@dataclass(frozen=True, slots=True)
class SettingChange:
    """A setting that differs: None where one of the two does not have it."""

    name: str
    old: Stated | None
    new: Stated | None


@dataclass(frozen=True, slots=True)
class StepChange:
    """A step that differs.

    Attributes
    ----------
    kind : {'kept', 'moved', 'renamed', 'added', 'removed'}
        ``renamed`` is a guess: another name at the same place, with like settings.
    old, new : str or None
        Its name in either, as the parameters have it.
    old_place, new_place : int or None
        Where it stands, from 1.
    settings : tuple of SettingChange
        What differs in it; all it has where it was added or removed.
    """

    kind: Kind
    old: str | None
    new: str | None
    old_place: int | None
    new_place: int | None
    settings: tuple[SettingChange, ...]


Pair = tuple[int | None, int | None]


def compare_runs(old: Run, new: Run) -> tuple[list[StepChange], list[SettingChange], list[tuple[str, str]]]:
    """Return steps that differ in the order of the sequence, other settings that do, and renumbered repetitions.

    The last are the same steps under another number, such as ``evaporate#3`` that is ``evaporate#2`` now.
    """
    changes = []
    renumbered = []
    for kind, (i, j) in _steps(old, new):
        before = {} if i is None else old.contents[i]
        after = {} if j is None else new.contents[j]
        one, other = (None if i is None else old.steps[i].name), (None if j is None else new.steps[j].name)
        settings = changed_settings(before, after)
        if kind != "kept" or settings:
            places = (None if i is None else i + 1), (None if j is None else j + 1)
            changes.append(StepChange(kind, one, other, *places, tuple(settings)))
        elif one is not None and other is not None and one != other:
            renumbered.append((one, other))
    return changes, changed_settings(old.others, new.others), renumbered


def changed_settings(old: Mapping[str, Stated], new: Mapping[str, Stated]) -> list[SettingChange]:
    """Return the settings that differ, in the order of the new ones, removed ones last."""
    names = [*new, *(name for name in old if name not in new)]
    return [
        SettingChange(name, old.get(name), new.get(name))
        for name in names
        if name not in old or name not in new or not old[name].same(new[name])
    ]


def _steps(old: Run, new: Run) -> list[tuple[Kind, Pair]]:
    """Return every step of both, paired where it is the same one, in the order of the sequence."""
    aligned = _align(old, new)
    found = _again(old, new, aligned)
    partner = {j: i for i, j in found}
    steps: list[tuple[Kind, Pair]] = []
    for i, j in aligned:
        if i is not None and j is not None:
            steps.append(("kept", (i, j)))
        elif j is not None:
            pair = partner.get(j), j
            steps.append((found[pair] if j in partner else "added", pair))
        elif i not in partner.values():
            steps.append(("removed", (i, None)))
    return steps


def _again(old: Run, new: Run, aligned: Sequence[Pair]) -> dict[Pair, Kind]:
    """Pair steps left over by the alignment: moved ones, then those that look renamed; the most alike first."""
    gaps = _gaps(aligned)
    left = [i for i, j in aligned if i is not None and j is None]
    right = [j for i, j in aligned if j is not None and i is None]
    wanted = [
        (kind, -_likeness(old, i, new, j), i, j)
        for i in left
        for j in right
        if (kind := _relation(old, i, new, j, gaps)) is not None
    ]
    found: dict[Pair, Kind] = {}
    for kind, unlike, i, j in sorted(wanted):  # "moved" stands before "renamed"
        alone = kind == "moved" and _alone(old.steps, i) and _alone(new.steps, j)
        if i in left and j in right and (-unlike >= ALIKE or alone):
            left.remove(i)
            right.remove(j)
            found[i, j] = kind
    return found


def _relation(old: Run, i: int, new: Run, j: int, gaps: Mapping[Pair, int]) -> Kind | None:
    """Return what an old step without a partner could be to a new one."""
    if old.steps[i].base == new.steps[j].base:
        return "moved"
    return "renamed" if gaps[i, None] == gaps[None, j] else None


def _alone(steps: Sequence[StepNames], place: int) -> bool:
    """Return whether there is just one step of this name."""
    return sum(step.base == steps[place].base for step in steps) == 1


def _gaps(aligned: Sequence[Pair]) -> dict[Pair, int]:
    """Return, of every step without a partner, how many pairs stand before it."""
    found: dict[Pair, int] = {}
    pairs = 0
    for i, j in aligned:
        if i is not None and j is not None:
            pairs += 1
        else:
            found[i, j] = pairs
    return found


def _align(old: Run, new: Run) -> list[Pair]:
    """Return the steps of both in order, as many of one name paired as possible, the most alike ones of equals."""
    n, m = len(old.steps), len(new.steps)
    share = 1.0 / (min(n, m) + 1)  # all likeness together counts less than one more pair
    score = [
        [
            1.0 + share * _likeness(old, i, new, j) if old.steps[i].base == new.steps[j].base else 0.0
            for j in range(m)
        ]
        for i in range(n)
    ]
    best = [[0.0] * (m + 1) for _ in range(n + 1)]
    for i in range(n - 1, -1, -1):
        for j in range(m - 1, -1, -1):
            pair = score[i][j] + best[i + 1][j + 1] if score[i][j] else 0.0
            best[i][j] = max(pair, best[i + 1][j], best[i][j + 1])
    aligned: list[Pair] = []
    i, j = 0, 0
    while i < n and j < m:
        if score[i][j] and best[i][j] == score[i][j] + best[i + 1][j + 1]:
            aligned.append((i, j))
            i, j = i + 1, j + 1
        elif best[i][j] == best[i + 1][j]:
            aligned.append((i, None))
            i += 1
        else:
            aligned.append((None, j))
            j += 1
    return [*aligned, *((k, None) for k in range(i, n)), *((None, k) for k in range(j, m))]


def _likeness(old: Run, i: int, new: Run, j: int) -> float:
    """Return how alike two steps are, 0 to 1: names of settings in common, and values in common among these."""
    one, other = old.contents[i], new.contents[j]
    both = [name for name in one if name in other]
    either = len(one) + len(other) - len(both)
    if not either:
        return 1.0
    equal = sum(one[name].same(other[name]) for name in both) / len(both) if both else 0.0
    return (len(both) / either + equal) / 2

"""The structure of a version of a sequence: its steps in order, and the names of their settings."""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from nightfold.errors import UnitError
from nightfold.units import conversion

DURATION = "duration"


@dataclass(frozen=True, slots=True)
class StepNames:
    """One step of a version: its name (``evaporate#2`` where it comes again) and those of its settings, as stated.

    Attributes
    ----------
    name : str
    settings : tuple of str
        Without the duration.
    timed : bool
        Whether a duration is stated.
    """

    name: str
    settings: tuple[str, ...]
    timed: bool

    @property
    def base(self) -> str:
        """The name without the number of its repetition."""
        head, mark, number = self.name.rpartition("#")
        return head if mark and number.isdecimal() else self.name

    @property
    def key(self) -> tuple[Any, ...]:
        """What tells versions apart; in which order a record states the settings of a step does not."""
        return self.name, self.timed, frozenset(self.settings)

    def parameter(self, setting: str) -> str:
        """Return the parameter that holds a setting of the step."""
        return f"{self.name}.{setting}"


@lru_cache(maxsize=256)
def parse_structure(text: str) -> tuple[StepNames, ...]:
    """Return the steps of a stored structure."""
    return tuple(
        StepNames(name, tuple(key for key in keys if key != DURATION), DURATION in keys)
        for name, keys in json.loads(text)
    )


def seconds_per(unit: str | None) -> float:
    """Return how many seconds a number of this unit counts; NaN where it is no time, or none is stated."""
    if not unit:
        return float("nan")
    try:
        return conversion(unit, "s").factor
    except UnitError:
        return float("nan")

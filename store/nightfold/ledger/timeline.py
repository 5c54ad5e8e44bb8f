"""The steps of one shot in time, with the settings of each."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime

from nightfold.ledger.comparing import Run, Stated
from nightfold.ledger.spreads import Spread
from nightfold.ledger.structure import DURATION, StepNames, seconds_per


@dataclass(frozen=True, slots=True)
class StepSetting:
    """A setting at one shot.

    Attributes
    ----------
    name : str
        Within its step; in full where it belongs to none.
    value : float, int, str, bool or None
        None where the shot does not state it.
    unit : str
        Empty for none.
    spread : Spread or None
        How it differs between the shots of the version; None where it is the same at all of them.
    """

    name: str
    value: float | int | str | bool | None
    unit: str
    spread: Spread | None

    @property
    def ramp(self) -> tuple[float, ...] | None:
        """The numbers of a list; None for anything else."""
        return ramp_of(self.value)


@dataclass(frozen=True, slots=True)
class TimelineStep:
    """A step at one shot.

    Attributes
    ----------
    name : str
        ``evaporate#2`` where a name comes again.
    start_s, duration_s : float
        NaN where it is not known: no duration is stated, or not in a unit of time.
    duration : StepSetting or None
        As stated.
    settings : tuple of StepSetting
        In the order in which they were stated.
    """

    name: str
    start_s: float
    duration_s: float
    duration: StepSetting | None
    settings: tuple[StepSetting, ...]


@dataclass(frozen=True, slots=True)
class Timeline:
    """One shot of a sequence, step by step.

    Attributes
    ----------
    version : int
        Number of the version it ran.
    uid : str
    started : datetime
    steps : tuple of TimelineStep
    others : tuple of StepSetting
        The settings that belong to no step; all of them where the sequence has no steps.
    """

    version: int
    uid: str
    started: datetime
    steps: tuple[TimelineStep, ...]
    others: tuple[StepSetting, ...]

    @property
    def duration_s(self) -> float:
        """The sum of all durations, in seconds; NaN where one is not known, or there are no steps."""
        return total_seconds(step.duration_s for step in self.steps) if self.steps else math.nan


def make_timeline(
    version: int, uid: str, started: datetime, run: Run, spread: Mapping[str, Spread]
) -> Timeline:
    """Return the timeline of a shot from its settings and how these differ between shots."""

    def setting(name: str, full: str) -> StepSetting:
        stated = run.settings.get(full)
        value, unit = (None, "") if stated is None else (stated.value, stated.unit)
        return StepSetting(name, value, unit, spread.get(full))

    steps: list[TimelineStep] = []
    lasted: list[float] = []
    for step in run.steps:
        duration = setting(DURATION, step.parameter(DURATION)) if step.timed else None
        seconds = _seconds(run, step)
        settings = tuple(setting(name, step.parameter(name)) for name in step.settings)
        steps.append(TimelineStep(step.name, total_seconds(lasted), seconds, duration, settings))
        lasted.append(seconds)
    return Timeline(
        version, uid, started, tuple(steps), tuple(setting(name, name) for name in sorted(run.others))
    )


def run_seconds(run: Run) -> float:
    """Return how long a shot took; NaN where that is not known."""
    return total_seconds(_seconds(run, step) for step in run.steps) if run.steps else math.nan


def total_seconds(durations: Iterable[float]) -> float:
    """Return a sum of durations to 15 digits: 8 s and 0.1 ms are 8.0001 s."""
    return float(f"{math.fsum(durations):.15g}")


def ramp_of(value: float | int | str | bool | None) -> tuple[float, ...] | None:
    """Return the numbers of a setting that is a list of them; None for anything else."""
    if not isinstance(value, str) or not value.startswith("["):
        return None
    try:
        numbers = json.loads(value)
    except ValueError:
        return None
    if any(isinstance(number, bool) or not isinstance(number, (int, float)) for number in numbers):
        return None
    return tuple(map(float, numbers))


def _seconds(run: Run, step: StepNames) -> float:
    stated: Stated | None = run.settings.get(step.parameter(DURATION)) if step.timed else None
    if stated is None or isinstance(stated.value, (str, bool)):
        return math.nan
    return total_seconds([float(stated.value) * seconds_per(stated.unit)])

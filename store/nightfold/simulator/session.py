"""Taking shots one after the other: the machine as it stands, a clock, a camera, and what the records say."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, time, timedelta
from itertools import product
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from nightfold.simulator.camera import Camera, Look
from nightfold.simulator.machine import MACHINE, SEQUENCES, ZONE, Recorder
from nightfold.simulator.schedule import Block, Edit
from nightfold.simulator.truth import Value
from nightfold.simulator.truths import Rounds

_ZONE = ZoneInfo(ZONE)


@dataclass(frozen=True)
class Taken:
    """A shot: its record, and what no record says.

    Attributes
    ----------
    record : dict
    outlier : bool
        Whether it is one of the occasional outliers.
    late : dict or None
        The record that follows minutes later, with what took the analysis longer.
    again : dict or None
        The record of a later analysis, with other numbers.
    """

    record: dict[str, Any]
    outlier: bool
    late: dict[str, Any] | None = None
    again: dict[str, Any] | None = None


@dataclass
class Heron:
    """The machine as it stands: what has been edited, and which labels have been used.

    Parameters
    ----------
    seed : int
        The same seed gives the same shots; an evening is the same whatever the number of evenings.
    declare_swept : bool or None
        Whether records say what is swept: all, none, or (None) as the habit of the day has it.
    """

    seed: int
    declare_swept: bool | None = None
    effect: float = 1.0
    recorders: dict[str, Recorder] = field(
        default_factory=lambda: {name: Recorder(spec) for name, spec in SEQUENCES.items()}
    )
    rounds: Rounds = field(default_factory=Rounds)

    def change(self, edit: Edit) -> Value:
        """Make an edit in every sequence and return the old value."""
        olds = [recorder.change(edit.parameter, edit.new) for recorder in self.recorders.values()]
        self.effect *= edit.effect
        return olds[0]


class Session:
    """Some hours at the machine.

    Parameters
    ----------
    heron : Heron
    night : date
    hour : int
        Local time after which it begins.
    rng : numpy.random.Generator
        All chance of these hours.
    prefix : str or None
        What the names of its shots begin with; without one the control program does not name them.
    """

    def __init__(
        self, heron: Heron, night: date, hour: int, rng: np.random.Generator, prefix: str | None
    ) -> None:
        self.heron, self.rng, self.prefix = heron, rng, prefix
        self.level = 1 + 0.015 * rng.standard_normal()
        self.camera = Camera(rng)
        start = datetime.combine(night, time(hour), _ZONE).astimezone(UTC)
        self.clock = start + timedelta(minutes=rng.uniform(0, 25))
        self.shots: list[Taken] = []

    def wait(self, shortest: float, longest: float) -> None:
        """Let minutes pass."""
        self.clock += timedelta(minutes=self.rng.uniform(shortest, longest))

    def now(self) -> datetime:
        """Return the time as the record writes it: local, to the millisecond."""
        local = self.clock.astimezone(_ZONE)
        return local.replace(microsecond=local.microsecond // 1000 * 1000)

    def order(self, block: Block) -> list[dict[str, Value]]:
        """Return the settings of the block's shots in the order of taking."""
        points = [dict(zip(block.sweeps, values, strict=True)) for values in product(*block.sweeps.values())]
        points = [dict(point) for _ in range(block.repeats) for point in points]
        for point in points:
            if "imaging_detuning" in point:
                point["imaging_synth_frequency"] = 82 + float(point["imaging_detuning"]) / 2
        if block.shuffled:
            rng = np.random.default_rng([self.heron.seed, 1000]) if block.part else self.rng
            points = [points[i] for i in rng.permutation(len(points))]
        return points[slice(*block.part)] if block.part else points

    def say(self, block: Block, final: bool) -> dict[str, Any]:
        """Return what the record says about the scan."""
        said: dict[str, Any] = {}
        if block.label:
            said["scan"] = block.label
        if block.declared if self.heron.declare_swept is None else self.heron.declare_swept:
            said["swept"] = list(block.sweeps)
        if block.planned:
            said["planned_shots"] = block.shots
        if final and block.closed:
            said["last"] = True
        if final and block.part and block.part[1] < block.shots:
            said["note"] = "stopped here for tonight, the offset lock keeps jumping"
        return said

    def look(self, sequence: str, changed: Mapping[str, Value], factor: float = 1.0) -> Look:
        """Return what the camera sees of a shot; `factor` multiplies the atoms."""
        settings = self.heron.recorders[sequence].settings | dict(changed)
        return self.camera.look(sequence, settings, factor * self.level * self.heron.effect)

    def write(
        self,
        sequence: str,
        changed: Mapping[str, Value],
        said: Mapping[str, Any],
        look: Look,
        machine: str = MACHINE,
    ) -> dict[str, Any]:
        """Return the record of the next shot."""
        uid = f"{self.prefix}{len(self.shots):04d}" if self.prefix else None
        return self.heron.recorders[sequence].write(uid, self.now(), changed, said, look, machine)

    def pass_cycle(self, sequence: str, changed: Mapping[str, Value]) -> None:
        """Let the clock run on for the cycle of a shot."""
        recorder = self.heron.recorders[sequence]
        settings = recorder.settings | dict(changed)
        extra_s = float(settings["hold_time"]) / 1e3 + float(settings["evaporate#3.duration"])
        self.clock += timedelta(seconds=recorder.spec.cycle_s + extra_s + self.rng.uniform(0, 1.4))

    def take(self, sequence: str, changed: Mapping[str, Value], said: Mapping[str, Any]) -> None:
        """Take one shot as it should be."""
        look = self.look(sequence, changed)
        self.shots.append(Taken(self.write(sequence, changed, said, look), look.outlier))
        self.pass_cycle(sequence, changed)

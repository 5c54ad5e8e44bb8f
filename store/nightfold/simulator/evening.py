"""Running the evenings: plan in, shot records and truth out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, time, timedelta
from itertools import product, zip_longest
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from nightfold.simulator.camera import Camera
from nightfold.simulator.machine import SEQUENCES, ZONE, Recorder
from nightfold.simulator.schedule import Block, Edit, Evening, plan_evening
from nightfold.simulator.truth import TrueChange, TrueEdit, Truth, Value
from nightfold.simulator.truths import Rounds, state_truths

_ZONE = ZoneInfo(ZONE)


@dataclass(frozen=True)
class Taken:
    """A shot: its record, and whether it is one of the occasional outliers (which no record says)."""

    record: dict[str, Any]
    outlier: bool


@dataclass(frozen=True)
class Night:
    """One evening as it went."""

    night: date
    shots: tuple[Taken, ...]
    truths: tuple[Truth, ...]
    changes: tuple[TrueChange, ...]
    edits: tuple[TrueEdit, ...]


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

    def run(self, index: int) -> Night:
        """Return an evening; evenings have to be run in order, since edits last."""
        return _Run(self, plan_evening(index)).run()

    def change(self, edit: Edit) -> Value:
        """Make an edit in every sequence and return the old value."""
        olds = [recorder.change(edit.parameter, edit.new) for recorder in self.recorders.values()]
        self.effect *= edit.effect
        return olds[0]


class _Run:
    """One evening in progress."""

    def __init__(self, heron: Heron, evening: Evening) -> None:
        self.heron, self.evening = heron, evening
        self.rng = np.random.default_rng([heron.seed, evening.index])
        self.level = 1 + 0.015 * self.rng.standard_normal()
        self.camera = Camera(self.rng)
        start = datetime.combine(evening.night, time(20), _ZONE).astimezone(UTC)
        self.clock = start + timedelta(minutes=self.rng.uniform(0, 25))
        self.until_reference = int(self.rng.integers(15, 20))
        self.shots: list[Taken] = []
        self.truths: list[Truth] = []
        self.changes: list[TrueChange] = []
        self.edits: list[TrueEdit] = []

    def run(self) -> Night:
        for _ in range(4):  # a look whether there are atoms at all
            self._take("hold-in-trap", {}, {})
        self._wait(8, 15)
        for slot, blocks in enumerate(self.evening.slots):
            for edit in self.evening.edits:
                if edit.slot == slot:
                    self._edit(edit)
            self._scan(blocks)
            self._wait(55, 125)
        lists = tuple(self.truths), tuple(self.changes), tuple(self.edits)
        return Night(self.evening.night, tuple(self.shots), *lists)

    def _wait(self, shortest: float, longest: float) -> None:
        self.clock += timedelta(minutes=self.rng.uniform(shortest, longest))

    def _edit(self, edit: Edit) -> None:
        old, at = self.heron.change(edit), self._now()
        self.edits.append(TrueEdit(at, edit.parameter, old, edit.new))
        if edit.effect != 1:
            size = round(edit.effect - 1, 9)
            for observable in ("atom_number", "optical_depth"):
                self.changes.append(TrueChange(at, "step", observable, size, edit.parameter, old, edit.new))

    def _scan(self, blocks: tuple[Block, ...]) -> None:
        orders = [self._order(block) for block in blocks]
        spans: dict[int, tuple[datetime, datetime]] = {}
        for turn in zip_longest(*orders):
            for place, changed in enumerate(turn):
                if changed is None:
                    continue
                self._take_reference_if_due()
                block, now = blocks[place], self._now()
                spans[place] = spans.get(place, (now, now))[0], now
                self._take(block.sequence, changed, self._say(block, changed is orders[place][-1]))
        for place, block in enumerate(blocks):
            self.truths += state_truths(block, *self.heron.rounds.name(block, *spans[place]))

    def _take_reference_if_due(self) -> None:
        if self.until_reference == 0:
            self._take("hold-in-trap", {}, {"reference": True})
            self.until_reference = int(self.rng.integers(15, 20))
        self.until_reference -= 1

    def _order(self, block: Block) -> list[dict[str, Value]]:
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

    def _say(self, block: Block, final: bool) -> dict[str, Any]:
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

    def _now(self) -> datetime:
        """Return the time as the record writes it: local, to the millisecond."""
        local = self.clock.astimezone(_ZONE)
        return local.replace(microsecond=local.microsecond // 1000 * 1000)

    def _take(self, sequence: str, changed: Mapping[str, Value], said: Mapping[str, Any]) -> None:
        """Take one shot and let the clock run on for a cycle."""
        recorder = self.heron.recorders[sequence]
        settings = recorder.settings | dict(changed)
        look = self.camera.look(sequence, settings, self.level * self.heron.effect)
        # on some evenings the control program forgets to name its shots
        named = self.evening.index % 6 != 5
        uid = f"heron-{self.evening.night:%Y%m%d}-{len(self.shots):04d}" if named else None
        record = recorder.write(uid, self._now(), changed, said, look)
        self.shots.append(Taken(record, look.outlier))
        extra_s = float(settings["hold_time"]) / 1e3 + float(settings["evaporate#3.duration"])
        self.clock += timedelta(seconds=recorder.spec.cycle_s + extra_s + self.rng.uniform(0, 1.4))


def run_nights(seed: int, nights: int, declare_swept: bool | None) -> Iterator[Night]:
    """Yield the evenings one after the other.

    Raises
    ------
    ValueError
        If `nights` is less than one.
    """
    if nights < 1:
        raise ValueError(f"heron cannot run for {nights} nights; ask for at least 1")
    heron = Heron(seed, declare_swept)
    for index in range(nights):
        yield heron.run(index)

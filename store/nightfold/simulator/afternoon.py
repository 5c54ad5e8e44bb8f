"""Running the afternoons: the work of `afternoons` in, shot records and truth out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date, datetime
from math import sqrt
from typing import Any

import numpy as np

from nightfold.simulator.afternoons import AFTERNOONS, STEP_ADDED, WRONG_NAME, Work
from nightfold.simulator.camera import Look
from nightfold.simulator.session import Heron, Session, Taken
from nightfold.simulator.steps import SETTLE
from nightfold.simulator.truth import Mishap, TrueVersion, Value
from nightfold.simulator.truths import state_truths

HOUR = 14
CHANGED = "hold-in-trap"
"""The sequence that gets a step more."""
SATURATION_ATOMS = 3.2e5
"""Atoms at which the analysis that takes the absorption for weak sees half of them."""
FIRST_ANALYSIS: Mapping[str, Any] = {"name": "absorption", "version": "1", "settings": {"saturation": False}}
LATER_ANALYSIS: Mapping[str, Any] = {"name": "absorption", "version": "2", "settings": {"saturation": True}}
LATE_ANALYSIS: Mapping[str, Any] = {"name": "widths", "version": "3"}


@dataclass(frozen=True)
class Afternoon:
    """An afternoon as it went."""

    shots: tuple[Taken, ...] = ()
    mishaps: tuple[Mishap, ...] = ()
    versions: tuple[TrueVersion, ...] = ()


def run_afternoon(heron: Heron, index: int, night: date) -> Afternoon:
    """Return the afternoon before an evening, counted from 0; nearly all are without."""
    works = AFTERNOONS.get(index, ())
    return _Run(heron, index, night).run(works) if works else Afternoon()


@dataclass(frozen=True)
class _Done:
    """A work that was done: the key of its scan, and its span."""

    work: Work
    scan: str
    first: datetime
    last: datetime
    shots: int


class _Run(Session):
    """One afternoon in progress."""

    def __init__(self, heron: Heron, index: int, night: date) -> None:
        rng = np.random.default_rng([heron.seed, index, 1])
        super().__init__(heron, night, HOUR, rng, f"heron-{night:%Y%m%d}-a")
        self.index = index

    def run(self, works: tuple[Work, ...]) -> Afternoon:
        if self.index == STEP_ADDED:
            self.heron.recorders[CHANGED].add_step(SETTLE, after="evaporate")
        done = []
        for work in works:
            self.wait(*work.wait)
            done.append(self._do(work))
        return Afternoon(tuple(self.shots), tuple(_tell(done)), self._new_versions(done))

    def _new_versions(self, done: list[_Done]) -> tuple[TrueVersion, ...]:
        first = next((item.first for item in done if item.work.block.sequence == CHANGED), None)
        return (TrueVersion(first, CHANGED, SETTLE.name),) if first and self.index == STEP_ADDED else ()

    def _do(self, work: Work) -> _Done:
        order = self.order(work.block)
        times = []
        for number, changed in enumerate(order):
            share = number / max(len(order) - 1, 1)
            if work.references_every and number % work.references_every == 0:
                self._shoot(work, {}, {"reference": True}, share)
            said = self.say(work.block, number == len(order) - 1)
            said |= _note(work, number, len(order))
            times.append(self.now())
            self._shoot(work, changed, said, share)
        if work.references_every:
            self._shoot(work, {}, {"reference": True}, 1)
        scan, first, last = self.heron.rounds.name(work.block, times[0], times[-1])
        return _Done(work, scan, first, last, len(order))

    def _shoot(self, work: Work, changed: Mapping[str, Value], said: Mapping[str, Any], share: float) -> None:
        """Take one shot, with what goes wrong; `share` of the work is done."""
        sequence = work.block.sequence
        look = self.look(sequence, changed, 1 + work.drift * share)
        recorded = {name: _misread(value, work.recorded) for name, value in changed.items()}
        record = self.write(sequence, recorded, said, look, work.machine)
        late = again = None
        if work.saturated and not look.failed:
            record, again = _analyse_twice(record, look)
        if work.late and not look.failed:
            record, late = _hold_back(record, work.late)
        self.shots.append(Taken(record, look.outlier, late, again))
        self.pass_cycle(sequence, changed)


def _misread(value: Value, factor: float) -> Value:
    return value if factor == 1 else round(float(value) * factor, 4)


def _note(work: Work, number: int, shots: int) -> dict[str, str]:
    """Return the note at a shot of a work, if there is one, as the record's field."""
    text = work.notes.get(number) or (work.notes.get(-1) if number == shots - 1 else None)
    return {"note": text} if text else {}


def _hold_back(record: dict[str, Any], names: tuple[str, ...]) -> tuple[dict[str, Any], dict[str, Any]]:
    """Return a record without some observables, and the one that brings them later."""
    seen = record["observables"]
    late = {name: seen[name] for name in names if name in seen}
    now = {name: item for name, item in seen.items() if name not in late}
    amendment = {"format": 1, "uid": record["uid"], "observables": late, "derivation": dict(LATE_ANALYSIS)}
    return record | {"observables": now}, amendment


def _analyse_twice(record: dict[str, Any], look: Look) -> tuple[dict[str, Any], dict[str, Any]]:
    """Return a record with too few atoms in it, and the one of the later analysis, which has them right."""
    right = look.observables
    atoms = right["atom_number"]["value"]
    seen = 1 / (1 + max(atoms, 0) / SATURATION_ATOMS)
    wrong = {
        "atom_number": {
            "value": round(atoms * seen),
            "stderr": round(sqrt((0.011 * atoms * seen) ** 2 + 450**2)),
        },
        "optical_depth": round(right["optical_depth"] * seen, 4),
    }
    again = {"format": 1, "uid": record["uid"], "observables": {name: right[name] for name in wrong}}
    first = record | {"observables": right | wrong, "derivation": dict(FIRST_ANALYSIS)}
    return first, again | {"derivation": dict(LATER_ANALYSIS)}


def _tell(done: list[_Done]) -> Iterator[Mishap]:
    """Yield the mishaps of an afternoon, each with what is true once it has been put right."""
    for kind in dict.fromkeys(item.work.mishap for item in done if item.work.mishap):
        parts = [item for item in done if item.work.mishap == kind]
        first, last = parts[0], parts[-1]
        block = first.work.block
        wrong = first.work.recorded != 1
        yield Mishap(
            kind=str(kind),
            scans=tuple(dict.fromkeys(item.scan for item in parts)),
            sequence=block.sequence,
            shots=sum(item.shots for item in parts),
            first=first.first,
            last=last.last,
            truths=tuple(state_truths(block, first.scan, first.first, last.last)),
            parameter=next(iter(block.sweeps)) if wrong else None,
            factor=first.work.recorded,
            machine=WRONG_NAME if first.work.machine == WRONG_NAME else None,
        )

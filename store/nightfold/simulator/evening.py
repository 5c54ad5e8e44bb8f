"""Running the nights: plan in, shot records and truth out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import date, datetime
from itertools import zip_longest

import numpy as np

from nightfold.simulator.afternoon import run_afternoon
from nightfold.simulator.schedule import Block, Edit, Evening, plan_evening
from nightfold.simulator.session import Heron, Session, Taken
from nightfold.simulator.truth import Mishap, TrueChange, TrueEdit, TrueVersion, Truth
from nightfold.simulator.truths import state_truths


@dataclass(frozen=True)
class Night:
    """One night as it went, the afternoon before it included."""

    night: date
    shots: tuple[Taken, ...]
    truths: tuple[Truth, ...]
    changes: tuple[TrueChange, ...]
    edits: tuple[TrueEdit, ...]
    mishaps: tuple[Mishap, ...] = ()
    versions: tuple[TrueVersion, ...] = ()


class _Run(Session):
    """One evening in progress."""

    def __init__(self, heron: Heron, evening: Evening) -> None:
        # on some evenings the control program forgets to name its shots
        prefix = f"heron-{evening.night:%Y%m%d}-" if evening.index % 6 != 5 else None
        rng = np.random.default_rng([heron.seed, evening.index])
        super().__init__(heron, evening.night, 20, rng, prefix)
        self.evening = evening
        self.until_reference = int(self.rng.integers(15, 20))
        self.truths: list[Truth] = []
        self.changes: list[TrueChange] = []
        self.edits: list[TrueEdit] = []

    def run(self) -> Night:
        for _ in range(4):  # a look whether there are atoms at all
            self.take("hold-in-trap", {}, {})
        self.wait(8, 15)
        for slot, blocks in enumerate(self.evening.slots):
            for edit in self.evening.edits:
                if edit.slot == slot:
                    self._edit(edit)
            self._scan(blocks)
            self.wait(55, 125)
        lists = tuple(self.truths), tuple(self.changes), tuple(self.edits)
        return Night(self.evening.night, tuple(self.shots), *lists)

    def _edit(self, edit: Edit) -> None:
        old, at = self.heron.change(edit), self.now()
        self.edits.append(TrueEdit(at, edit.parameter, old, edit.new))
        if edit.effect != 1:
            size = round(edit.effect - 1, 9)
            for observable in ("atom_number", "optical_depth"):
                self.changes.append(TrueChange(at, "step", observable, size, edit.parameter, old, edit.new))

    def _scan(self, blocks: tuple[Block, ...]) -> None:
        orders = [self.order(block) for block in blocks]
        spans: dict[int, tuple[datetime, datetime]] = {}
        for turn in zip_longest(*orders):
            for place, changed in enumerate(turn):
                if changed is None:
                    continue
                self._take_reference_if_due()
                block, now = blocks[place], self.now()
                spans[place] = spans.get(place, (now, now))[0], now
                self.take(block.sequence, changed, self.say(block, changed is orders[place][-1]))
        for place, block in enumerate(blocks):
            self.truths += state_truths(block, *self.heron.rounds.name(block, *spans[place]))

    def _take_reference_if_due(self) -> None:
        if self.until_reference == 0:
            self.take("hold-in-trap", {}, {"reference": True})
            self.until_reference = int(self.rng.integers(15, 20))
        self.until_reference -= 1


def run_nights(seed: int, nights: int, declare_swept: bool | None) -> Iterator[Night]:
    """Yield the nights one after the other.

    Raises
    ------
    ValueError
        If `nights` is less than one.
    """
    if nights < 1:
        raise ValueError(f"heron cannot run for {nights} nights; ask for at least 1")
    heron = Heron(seed, declare_swept)
    for index in range(nights):
        evening = plan_evening(index)
        before = run_afternoon(heron, index, evening.night)
        night = _Run(heron, evening).run()
        shots = (*before.shots, *night.shots)
        yield replace(night, shots=shots, mishaps=before.mishaps, versions=before.versions)

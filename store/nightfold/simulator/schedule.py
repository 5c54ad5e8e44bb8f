"""Six weeks of evenings at heron: what is scanned when, and what people change in between.

Five evenings a week with a fixed pattern, of which ranges and habits vary from week to week: sweeps declared
or not, points shuffled or in order, an evening that ends in the middle of a scan.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import date, timedelta
from math import prod

import numpy as np

from nightfold.simulator.truth import Value

FIRST_NIGHT = date(2026, 9, 28)
"""A Monday; the six weeks cross the end of daylight saving time."""

NIGHTS = 30


@dataclass(frozen=True)
class Block:
    """A scan as it is run.

    Attributes
    ----------
    sequence : str
    sweeps : mapping of str to tuple
        Parameter and its values; several make a grid.
    repeats : int
        How often each point is taken.
    label : str or None
        Without one the scan has to be found.
    declared : bool
        Whether the records say what is swept.
    shuffled : bool
        Points of all repeats in random order, or each repeat in the order given.
    planned, closed : bool
        Whether the records announce `planned_shots`; whether the last one says so.
    told : tuple of str
        Which of its truths are stated (names in `truths.TOLD`).
    part : (int, int) or None
        Only these of the shots: a scan that is broken off, or taken up again.
    """

    sequence: str
    sweeps: Mapping[str, tuple[Value, ...]]
    repeats: int = 1
    label: str | None = None
    declared: bool = True
    shuffled: bool = True
    planned: bool = False
    closed: bool = False
    told: tuple[str, ...] = ()
    part: tuple[int, int] | None = None

    @property
    def shots(self) -> int:
        """Shots of the whole scan, references not counted."""
        return self.repeats * prod(len(values) for values in self.sweeps.values())


@dataclass(frozen=True)
class Edit:
    """A parameter changed by a person before a slot of an evening; `effect` multiplies all atom numbers."""

    night: int
    slot: int
    parameter: str
    new: Value
    effect: float = 1.0


@dataclass(frozen=True)
class Evening:
    """The plan of one evening: slots one after the other, the blocks of a slot interleaved shot by shot."""

    index: int
    night: date
    slots: tuple[tuple[Block, ...], ...]
    edits: tuple[Edit, ...] = field(default=())


EDITS = (
    Edit(3, 2, "molasses_bias_z", 0.116),
    Edit(6, 1, "trap_mirror_x", 4.32),
    Edit(8, 1, "imaging_pulse", 45),
    Edit(12, 2, "fan_on", False),
    Edit(15, 1, "shutter_imaging_delay", 2.55),
    Edit(17, 1, "repump_power", 51, effect=0.86),
    Edit(22, 2, "bias_z_current", 0.398),
    Edit(26, 1, "pattern_file", "ramps-08"),
)
"""All that is changed for good; of these only the repumping light matters to the atom number."""


def plan_evening(index: int) -> Evening:
    """Return the plan of an evening, counted from 0; after six weeks the pattern goes on without edits."""
    week, day = divmod(index, 5)
    slots = (_monday, _tuesday, _wednesday, _thursday, _friday)[day](week)
    edits = tuple(edit for edit in EDITS if edit.night == index)
    return Evening(index, FIRST_NIGHT + timedelta(days=7 * week + day), slots, edits)


def grid(low: float, high: float, points: int, digits: int = 3) -> tuple[float, ...]:
    """Return evenly spaced values, rounded as a person would type them."""
    return tuple(round(float(value), digits) for value in np.linspace(low, high, points))


def _monday(week: int) -> tuple[tuple[Block, ...], ...]:
    loss = Block(
        "hold-in-trap", {"coil_current": grid(58.4, 64.4, 31)}, 2, "loss-coarse", planned=True, closed=True
    )
    slosh = Block("kick-and-hold", {"hold_time": grid(0, 160, 41)}, 2, "slosh-y", shuffled=week != 2)
    lifetime = Block("long-hold", {"hold_time": grid(200, 26200, 14)}, 2, "lifetime", planned=True)
    return (
        (replace(loss, told=("center", "fwhm") if week == 0 else ("center",) if week == 4 else ()),),
        (replace(slosh, told=("frequency",) if week == 0 else ()),),
        (replace(lifetime, told=("lifetime",) if week == 0 else ()),),
    )


def _tuesday(week: int) -> tuple[tuple[Block, ...], ...]:
    mirror = Block("hold-in-trap", {"trap_mirror_x": grid(3.1, 5.5, 25)}, 2, declared=week % 2 == 1)
    line = {"imaging_detuning": grid(-18, 18, 25)}
    evaporation: dict[str, tuple[Value, ...]] = {
        "evaporate#3.end_power": grid(0.3, 1.0, 8),
        "evaporate#3.duration": grid(0.8, 2.4, 5),
    }
    return (
        (replace(mirror, told=("mirror",) if week == 0 else ()),),
        (Block("hold-in-trap", line, 2, "imaging-line", told=("line",) if week == 1 else ()),),
        (Block("evaporate-and-look", evaporation, 1, "evaporation-map", declared=week > 1),),
        (
            Block(
                "long-hold", {"hold_time": grid(500, 21500, 15)}, 2, told=("lifetime",) if week == 2 else ()
            ),
        ),
    )


def _wednesday(week: int) -> tuple[tuple[Block, ...], ...]:
    first = week == 0
    low = Block(
        "hold-in-trap", {"coil_current": grid(60.2, 62.6, 25)}, 2, "loss-low", told=("center",) * first
    )
    high = Block(
        "hold-in-trap", {"coil_current": grid(71.6, 74.0, 25)}, 2, "loss-high", told=("high",) * first
    )
    dense = Block("dense-hold", {"hold_time": grid(0, 900, 16)}, 3, told=("three-body",) * first)
    slosh = Block("kick-and-hold", {"hold_time": grid(0, 128, 33)}, declared=False, shuffled=week % 2 == 0)
    return (low, high), (dense,), (replace(slosh, told=("frequency",) if week == 5 else ()),)


def _thursday(week: int) -> tuple[tuple[Block, ...], ...]:
    both: dict[str, tuple[Value, ...]] = {
        "coil_current": grid(59.9, 62.9, 13),
        "hold_time": (20, 60, 120, 240),
    }
    loss_map = Block("hold-in-trap", both, 2, "loss-map", planned=True, told=("slice",) if week == 1 else ())
    power = Block(
        "evaporate-and-look", {"evaporate#3.end_power": grid(0.25, 1.2, 20)}, 2, declared=week % 2 == 0
    )
    last = (
        _fine_loss(week, (0, 28)) if week == 1 else Block("long-hold", {"hold_time": grid(500, 21500, 15)}, 2)
    )
    return (loss_map,), (power,), (last,)


def _friday(week: int) -> tuple[tuple[Block, ...], ...]:
    probe: dict[str, tuple[Value, ...]] = {"probe_polarisation": ("sigma-minus", "linear", "sigma-plus")}
    fine = _fine_loss(week, (28, 75) if week == 1 else None)
    slosh = Block("kick-and-hold", {"hold_time": grid(0, 120, 31)}, 1, declared=week % 2 == 1)
    return (
        (fine,),
        (Block("hold-in-trap", probe, 6, "probe-check", planned=True),),
        (slosh,),
        (Block("dense-hold", {"hold_time": grid(0, 600, 13)}, 2, "dense"),),
    )


def _fine_loss(week: int, part: tuple[int, int] | None) -> Block:
    """Return a fine scan, of either resonance by turns; in week 1 it is broken off and taken up again."""
    values = grid(71.8, 73.8, 25) if week % 2 == 0 else grid(60.4, 62.4, 25)
    told = ("center",) if part and part[1] == 75 else ()
    return Block("hold-in-trap", {"coil_current": values}, 3, "loss-fine", planned=True, part=part, told=told)

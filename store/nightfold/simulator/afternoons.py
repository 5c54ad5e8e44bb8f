"""Afternoons at heron on which something goes otherwise than planned: what is taken, and what goes wrong with it.

They have random streams of their own, so that the evenings are the same with and without them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from nightfold.simulator.machine import MACHINE
from nightfold.simulator.physics import LOW
from nightfold.simulator.schedule import Block, grid


@dataclass(frozen=True)
class Work:
    """A block as it is taken in an afternoon.

    Attributes
    ----------
    block : Block
    mishap : str or None
        The kind of mishap it is part of (a name in `truths.TALES`).
    wait : (float, float)
        Minutes before it: shortest, longest.
    machine : str
        What the control program thinks the machine is called.
    recorded : float
        What is recorded of a swept setting, as a factor.
    drift : float
        Relative change of the atoms from the first shot to the last.
    references_every : int or None
        After so many shots a reference shot is taken; one stands at either end.
    late : tuple of str
        Observables that the analysis finds minutes after the shot.
    saturated : bool
        The first analysis takes the absorption for weak and sees too few atoms in a dense cloud; a later one is right.
    notes : mapping of int to str
        What somebody noted at which of its shots; -1 is the last one.
    """

    block: Block
    mishap: str | None = None
    wait: tuple[float, float] = (4, 9)
    machine: str = MACHINE
    recorded: float = 1.0
    drift: float = 0.0
    references_every: int | None = None
    late: tuple[str, ...] = ()
    saturated: bool = False
    notes: Mapping[int, str] = field(default_factory=dict)


LATE = ("temperature", "width_x", "width_y")
RANGE_FACTOR = 100 / 120
"""The supply of the coils was set to its range of 120 A, and read as if it were set to 100 A."""
WRONG_NAME = "Heron"


def _halves(block: Block, first: int) -> tuple[Block, Block]:
    """Return a block in two parts: the first so many shots, and the rest."""
    return replace(block, part=(0, first)), replace(block, part=(first, block.shots))


def _homing() -> tuple[float, ...]:
    """Return currents that close in on the resonance, as somebody does who looks at each shot before the next."""
    steps = [1.4 * 0.84**number * (-1) ** number for number in range(24)]
    return tuple(round(LOW.center + 0.05 + step, 3) for step in steps)


def _monday() -> tuple[Work, ...]:
    narrow = Block(
        "hold-in-trap",
        {"coil_current": grid(60.2, 62.6, 25)},
        2,
        "loss-narrow",
        planned=True,
        told=("center",),
    )
    begun, ended = _halves(narrow, 21)
    between = Block("hold-in-trap", {"imaging_detuning": grid(-12, 12, 13)}, shuffled=False)
    return (
        Work(
            begun, "resumed", notes={-1: "aborted: the offset lock jumped, checking the imaging line first"}
        ),
        Work(between),
        Work(ended, "resumed", notes={0: "lock is back, going on"}),
    )


def _tuesday() -> tuple[Work, ...]:
    transfer = Block(
        "rf-transfer",
        {"rf_frequency": grid(13.3, 13.6, 31)},
        2,
        "rf-transfer",
        planned=True,
        told=("polarisation",),
    )
    notes = {17: "door open, somebody walked in", -1: "line sits where it was in spring"}
    return (Work(transfer, "clouds", late=("temperature",), notes=notes),)


def _wednesday() -> tuple[Work, ...]:
    dense = Block("dense-hold", {"hold_time": grid(0, 900, 16)}, 3, "dense-again", told=("three-body",))
    loss = Block("hold-in-trap", {"coil_current": grid(60.2, 62.6, 25)}, 2, "loss-range", told=("center",))
    return (
        Work(dense, "reanalysed", saturated=True),
        Work(loss, "misrecorded", recorded=RANGE_FACTOR, notes={0: "swapped the coil supply"}),
    )


def _thursday() -> tuple[Work, ...]:
    check = Block(
        "hold-in-trap",
        {"coil_current": grid(71.6, 74.0, 25)},
        2,
        "loss-check",
        planned=True,
        told=("high",),
    )
    begun, ended = _halves(check, 26)
    drifting = Block(
        "hold-in-trap",
        {"coil_current": grid(59.4, 63.4, 81)},
        1,
        "loss-drifting",
        shuffled=False,
        told=("relative", "depth"),
    )
    return (
        Work(begun, "mislabelled", notes={-1: "coffee"}),
        Work(replace(ended, label="loss-chekc"), "mislabelled", wait=(12, 20)),
        Work(drifting, "drifting", drift=-0.2, references_every=10, late=LATE),
    )


def _friday() -> tuple[Work, ...]:
    restart = Block(
        "hold-in-trap", {"coil_current": grid(60.2, 62.6, 25)}, 2, "loss-restart", told=("center",)
    )
    begun, ended = _halves(restart, 24)
    homing = Block("hold-in-trap", {"coil_current": _homing()}, 1, "loss-homing", shuffled=False)
    single = Block("hold-in-trap", {"coil_current": (61.37,)}, 1, "single-look")
    return (
        Work(begun, "misnamed", machine=WRONG_NAME, notes={-1: "these went into the record under Heron"}),
        Work(ended, "misnamed", notes={0: "control program knows our name again"}),
        Work(replace(homing, told=("center",)), "adaptive"),
        Work(single),
    )


AFTERNOONS: Mapping[int, tuple[Work, ...]] = {
    5: _monday(),
    6: _tuesday(),
    7: _wednesday(),
    8: _thursday(),
    9: _friday(),
}
"""What is taken before the evening of which night, all in the second week."""
STEP_ADDED = 7
"""The night from whose afternoon on `hold-in-trap` has one step more."""

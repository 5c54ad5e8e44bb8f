"""The numbers that the scans of heron are stated to hold."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime, timedelta
from math import exp

from nightfold.simulator import clouds, physics
from nightfold.simulator.schedule import Block
from nightfold.simulator.truth import Truth

REJOIN_WITHIN = timedelta(hours=24)
"""As in the card: a label used again later than this opens a new round."""
MAP_SLICE = {"hold_time": 240.0}
"""The slice of the two-axis scan that is stated: the longest hold, where the dip is deepest."""


NOMINAL_HOLD_MS, NOMINAL_CURRENT_A = 120.0, 48.0
"""Of the reference shots."""


@dataclass(frozen=True)
class Told:
    """What is stated about a scan, whatever its label and its resonance."""

    what: str
    model: str
    observable: str
    parameter: str
    value: float
    unit: str
    along: str | None = None
    relative_to: str | None = None


def _depth() -> float:
    """Return how deep the dip is after 120 ms, relative to shots at the nominal current far away."""
    depth = physics.LOW.depth * (1 - exp(-NOMINAL_HOLD_MS / physics.LOSS_TIME_MS))
    return -depth / (1 - depth * physics.lorentzian(NOMINAL_CURRENT_A, physics.LOW.center, physics.LOW.fwhm))


def _detuning_khz() -> float:
    """Return where the radio-frequency line lies as the card counts its detuning."""
    return round((clouds.RF_CENTER_MHZ - clouds.DETUNING_FROM_MHZ) * 1e3, 9)


TOLD = {
    "center": Told("loss resonance, centre", "lorentzian", "atom_number", "center", physics.LOW.center, "A"),
    "fwhm": Told("loss resonance, width", "lorentzian", "atom_number", "fwhm", physics.LOW.fwhm, "A"),
    "high": Told("higher resonance, centre", "lorentzian", "atom_number", "center", physics.HIGH.center, "A"),
    "slice": Told(
        "loss map, centre at 240 ms",
        "lorentzian",
        "atom_number",
        "center",
        physics.LOW.center,
        "A",
        along="coil_current",
    ),
    "frequency": Told(
        "sloshing, frequency",
        "damped-oscillation",
        "center_y",
        "frequency",
        physics.SLOSH_FREQUENCY_PER_MS,
        "1/ms",
    ),
    "lifetime": Told("lifetime", "exponential", "atom_number", "lifetime", physics.LIFETIME_MS, "ms"),
    "three-body": Told(
        "three-body decay, rate",
        "three-body",
        "atom_number",
        "three_body_rate",
        physics.THREE_BODY_RATE_PER_MS,
        "1/ms",
    ),
    "line": Told(
        "imaging line, centre", "lorentzian", "atom_number", "center", physics.LINE_CENTER_MHZ, "MHz"
    ),
    "mirror": Told(
        "trap mirror, best setting", "gaussian", "atom_number", "center", physics.MIRROR_CENTER_V, "V"
    ),
    "polarisation": Told(
        "transfer, centre", "gaussian", "polarisation", "center", _detuning_khz(), "kHz", along="detuning"
    ),
    "relative": Told(
        "loss resonance, centre",
        "lorentzian",
        "atom_number",
        "center",
        physics.LOW.center,
        "A",
        relative_to="reference",
    ),
    "depth": Told(
        "loss resonance, depth",
        "lorentzian",
        "atom_number",
        "amplitude",
        _depth(),
        "",
        relative_to="reference",
    ),
}


@dataclass
class Rounds:
    """Which labels have been used, when last, and how often."""

    known: dict[tuple[str, str], tuple[int, datetime, datetime]] = field(default_factory=dict)

    def name(self, block: Block, first: datetime, last: datetime) -> tuple[str, datetime, datetime]:
        """Return how the scan of a block is called, and the times of its first and last shot.

        A block taken up again within a day has the round, and the first shot, of the one before.
        """
        if block.label is None:
            return f"found {first:%Y-%m-%d %H:%M}", first, last
        key = (block.sequence, block.label)
        number, began, ended = self.known.get(key, (0, first, first))
        if number == 0 or first - ended > REJOIN_WITHIN:
            number, began = number + 1, first
        self.known[key] = number, began, last
        return f"{block.label}#{number}", began, last


def state_truths(block: Block, scan: str, first: datetime, last: datetime) -> list[Truth]:
    """Return what is stated about a scan that has been taken."""
    truths = []
    for name in block.told:
        told = TOLD[name]
        sliced = name == "slice"
        truths.append(
            Truth(
                what=f"{told.what} ({scan})",
                scan=scan,
                sequence=block.sequence,
                model=told.model,
                observable=told.observable,
                along=told.along,
                parameter=told.parameter,
                value=told.value,
                unit=told.unit,
                background=None,
                swept=tuple(block.sweeps),
                first=first,
                last=last,
                where=MAP_SLICE if sliced else {},
                relative_to=told.relative_to,
            )
        )
    return truths

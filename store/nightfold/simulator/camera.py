"""The camera of heron: pictures with scatter, the occasional outlier, and shots that fail in bursts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from nightfold.simulator import clouds
from nightfold.simulator.physics import ATOMS, Noise, expect_signal, read_cloud
from nightfold.simulator.truth import Value

FAILURE, FAILURE_GOES_ON, OUTLIER = 0.008, 0.45, 0.004
"""Chances per shot: that it fails, that it fails after one that failed, that a good one is an outlier."""
REASONS = ("no atoms: lock lost", "no atoms: trap servo at its rail", "no picture: camera timed out")
OBSERVABLES = (
    "atom_number",
    "temperature",
    "width_x",
    "width_y",
    "center_x",
    "center_y",
    "optical_depth",
    "trap_light",
)


@dataclass(frozen=True)
class Look:
    """What was read from a shot, why it failed if it did, and whether it is an outlier, never recorded."""

    observables: dict[str, Any]
    failed: str | None = None
    outlier: bool = False


class Camera:
    """The camera for one evening.

    Parameters
    ----------
    rng : numpy.random.Generator
        The evening's.
    """

    def __init__(self, rng: np.random.Generator) -> None:
        self._rng = rng
        self._noise = Noise(rng.uniform(0.032, 0.055))
        self._reason: str | None = None

    def look(self, sequence: str, settings: Mapping[str, Value], factor: float) -> Look:
        """Return what is seen of a shot whose atom number is `factor` times the expected one."""
        chance, kind, depth = self._rng.uniform(size=3).tolist()
        if chance < (FAILURE_GOES_ON if self._reason else FAILURE):
            self._reason = self._reason or REASONS[int(kind * len(REASONS))]
            return Look(self._read_nothing(sequence, self._reason), self._reason)
        self._reason = None
        outlier = kind < OUTLIER
        factor *= 0.35 + 0.4 * depth if outlier else 1
        if sequence == clouds.SEQUENCE:
            transfer = clouds.expect_transfer(float(settings["rf_frequency"]))
            seen = clouds.read_clouds(ATOMS[sequence] * factor, transfer, self._noise, self._rng)
            return Look(seen, outlier=outlier)
        signal = expect_signal(sequence, settings).scaled(factor)
        observables = read_cloud(signal, float(settings["time_of_flight"]), self._noise, self._rng)
        if outlier:
            observables["width_x"] = None
        return Look(observables, outlier=outlier)

    def _read_nothing(self, sequence: str, reason: str) -> dict[str, Any]:
        if sequence == clouds.SEQUENCE:
            return dict.fromkeys(clouds.OBSERVABLES)
        nothing: dict[str, Any] = dict.fromkeys(OBSERVABLES)
        if reason.startswith("no picture"):
            return nothing
        atoms = round(self._noise.floor * self._rng.standard_normal())
        return nothing | {
            "atom_number": {"value": atoms, "stderr": round(self._noise.floor)},
            "optical_depth": 0.0,
        }

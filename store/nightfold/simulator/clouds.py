"""Two spin states of heron in one picture: what a radio-frequency pulse transfers from one to the other."""

from __future__ import annotations

from math import sqrt
from typing import Any

import numpy as np

from nightfold.simulator.physics import CENTER_UM, Noise, gaussian

SEQUENCE = "rf-transfer"
RF_CENTER_MHZ = 13.437
RF_FWHM_MHZ = 0.064
RF_TRANSFER = 0.86
"""Share of the atoms that the pulse transfers on resonance; the pulse, and so the line, is a Gaussian."""
DETUNING_FROM_MHZ = 13.4
"""Where the card counts `detuning` from."""
SEPARATION_UM = 148.0
UP, DOWN = "up", "down"
OBSERVABLES = (
    "atom_number[up]",
    "atom_number[down]",
    "center_x[up]",
    "center_x[down]",
    "temperature",
    "center_y",
    "trap_light",
)


def expect_transfer(rf_frequency: float) -> float:
    """Return the share of the atoms in the upper state after the pulse, which began in the lower one."""
    return RF_TRANSFER * gaussian(rf_frequency, RF_CENTER_MHZ, RF_FWHM_MHZ)


def read_clouds(atoms: float, transfer: float, noise: Noise, rng: np.random.Generator) -> dict[str, Any]:
    """Return the observables of one shot with two clouds, with its noise.

    Parameters
    ----------
    atoms : float
        Expected, both clouds together; how many there are varies from shot to shot, and both clouds share that.
    transfer : float
        The share in the upper state.
    noise : Noise
    rng : numpy.random.Generator
        Eight normal numbers are drawn from it.
    """
    draw: list[float] = rng.standard_normal(8).tolist()
    total = atoms * (1 + noise.atom_number * draw[0])
    found = {
        UP: total * transfer + noise.floor * draw[1],
        DOWN: total * (1 - transfer) + noise.floor * draw[2],
    }
    temperature = 412 * (1 + 0.028 * draw[3])
    observables: dict[str, Any] = {
        f"atom_number[{cloud}]": {
            "value": round(number),
            "stderr": round(sqrt((0.011 * number) ** 2 + noise.floor**2)),
        }
        for cloud, number in found.items()
    }
    places = {UP: CENTER_UM[0] - SEPARATION_UM / 2, DOWN: CENTER_UM[0] + SEPARATION_UM / 2}
    for (cloud, place), drawn in zip(places.items(), draw[4:6], strict=True):
        center = {"value": round(place + 1.1 * drawn, 2), "unit": "um"}
        observables[f"center_x[{cloud}]"] = center if found[cloud] > 4 * noise.floor else None
    return observables | {
        "temperature": {"value": round(temperature, 1), "stderr": round(0.02 * temperature, 1), "unit": "nK"},
        "center_y": {"value": round(CENTER_UM[1] + 1.7 * draw[6], 2), "stderr": 1.2, "unit": "um"},
        "trap_light": {"value": round(2.306 * (1 + 0.003 * draw[7]), 4), "unit": "V"},
    }

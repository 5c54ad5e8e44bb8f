"""What a shot of heron gives: expected signals with known truth, then the noise of one shot.

Every signal is a product of factors each of which is exactly a line shape of the fits. Where nature would mix
two of them (one-body loss below the three-body decay, the tail of the other resonance below the nearer one),
the invented machine does not, so that the stated truth is the truth of the scan as well as of the machine.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import cos, exp, log, pi, sqrt
from typing import Any

import numpy as np

BOLTZMANN = 1.380649e-23
"""J/K, exact (SI, 2019)."""
MASS = 38.9637064864 * 1.66053906892e-27
"""kg, potassium-39: atomic mass (AME 2020) times the atomic mass constant (CODATA 2022)."""
CROSS_SECTION = 3 * 766.7e-9**2 / (2 * pi)
"""m^2, resonant absorption of a closed transition, 3 lambda^2 / (2 pi), D2 line."""


@dataclass(frozen=True)
class Resonance:
    """A dip of the atoms left against coil_current, in A; `depth` is reached after a long hold."""

    center: float
    fwhm: float
    depth: float


LOW = Resonance(center=61.374, fwhm=0.92, depth=0.66)
HIGH = Resonance(center=72.836, fwhm=0.58, depth=0.58)
LOSS_TIME_MS = 85.0
LIFETIME_MS = 8420.0
THREE_BODY_RATE_PER_MS = 0.00415
SLOSH_FREQUENCY_PER_MS = 0.04372
SLOSH_DECAY_MS = 140.0
SLOSH_AMPLITUDE_UM = 41.0
SLOSH_PHASE = -1.1
LINE_CENTER_MHZ = -0.86
LINE_FWHM_MHZ = 6.9
MIRROR_CENTER_V = 4.318
MIRROR_FWHM_V = 1.24

ATOMS = {
    "hold-in-trap": 152_000,
    "kick-and-hold": 138_000,
    "long-hold": 149_000,
    "dense-hold": 171_000,
    "evaporate-and-look": 156_000,
    "rf-transfer": 149_000,
}
"""Atoms of a shot with every factor at one."""
TEMPERATURE_NK = {"hold-in-trap": 412, "kick-and-hold": 455, "long-hold": 396, "dense-hold": 530}
CENTER_UM = (206.5, 318.2)
TRAP_SIZE_UM = 9.0
PROBE = {"sigma-minus": 1.0, "linear": 0.57, "sigma-plus": 0.21}
"""Atoms seen with each polarisation of the probe, relative."""


@dataclass(frozen=True)
class Signal:
    """Expected values of a shot: atoms, nK, and the vertical centre in micrometres."""

    atom_number: float
    temperature: float
    center_y: float

    def scaled(self, factor: float) -> Signal:
        """Return the same cloud with more or fewer atoms."""
        return replace(self, atom_number=self.atom_number * factor)


@dataclass(frozen=True)
class Noise:
    """The scatter of shots of one night.

    Attributes
    ----------
    atom_number : float
        Relative, shot to shot, normal.
    floor : float
        Atoms; what reading the picture adds.
    """

    atom_number: float
    floor: float = 450.0


def lorentzian(x: float, center: float, fwhm: float) -> float:
    """Return a Lorentzian of height one."""
    return 1 / (1 + (2 * (x - center) / fwhm) ** 2)


def gaussian(x: float, center: float, fwhm: float) -> float:
    """Return a Gaussian of height one."""
    return exp(-4 * log(2) * ((x - center) / fwhm) ** 2)


def expect_signal(sequence: str, settings: Mapping[str, Any]) -> Signal:
    """Return what a shot gives on average.

    Parameters
    ----------
    sequence : str
        Name of the sequence.
    settings : mapping
        Settings in the card's units, those of the steps included.
    """
    atoms = float(ATOMS[sequence])
    atoms *= gaussian(settings["trap_mirror_x"], MIRROR_CENTER_V, MIRROR_FWHM_V)
    atoms *= lorentzian(settings["imaging_detuning"], LINE_CENTER_MHZ, LINE_FWHM_MHZ)
    atoms *= PROBE[settings["probe_polarisation"]]
    hold_ms, center_y = settings["hold_time"], CENTER_UM[1]
    if sequence == "evaporate-and-look":
        return _evaporated(atoms, settings["evaporate#3.end_power"], settings["evaporate#3.duration"])
    if sequence == "hold-in-trap":
        atoms *= _survival(settings["coil_current"], hold_ms)
    elif sequence == "long-hold":
        atoms *= exp(-hold_ms / LIFETIME_MS)
    elif sequence == "dense-hold":
        atoms /= sqrt(1 + 2 * THREE_BODY_RATE_PER_MS * hold_ms)
    elif sequence == "kick-and-hold":
        center_y += _slosh(hold_ms)
    return Signal(atoms, TEMPERATURE_NK[sequence], center_y)


def _survival(coil_current: float, hold_ms: float) -> float:
    near = min((LOW, HIGH), key=lambda resonance: abs(coil_current - resonance.center))
    depth = near.depth * (1 - exp(-hold_ms / LOSS_TIME_MS))
    return exp(-hold_ms / LIFETIME_MS) * (1 - depth * lorentzian(coil_current, near.center, near.fwhm))


def _slosh(hold_ms: float) -> float:
    swing = cos(2 * pi * SLOSH_FREQUENCY_PER_MS * hold_ms + SLOSH_PHASE)
    return SLOSH_AMPLITUDE_UM * exp(-hold_ms / SLOSH_DECAY_MS) * swing


def _evaporated(atoms: float, end_power: float, duration_s: float) -> Signal:
    kept = (end_power / 0.42) ** 0.55 * exp(-duration_s / 6.5)
    hotter = 1 + 1.1 * exp(-duration_s / 0.7)
    return Signal(atoms * kept, 370 * (end_power / 0.42) * hotter, CENTER_UM[1])


def read_cloud(
    signal: Signal, time_of_flight_ms: float, noise: Noise, rng: np.random.Generator
) -> dict[str, Any]:
    """Return the observables of one shot, with its noise.

    Parameters
    ----------
    signal : Signal
        What is expected.
    time_of_flight_ms : float
        For the widths.
    noise : Noise
        Scatter of the atom number.
    rng : numpy.random.Generator
        Eight normal numbers are drawn from it.

    Notes
    -----
    Widths by sigma^2 = s0^2 + (k T / m) t^2, the optical density at the centre from number and widths. The
    stderr of the atom number is that of reading one picture; the larger scatter of shots is not in it.
    """
    draw: list[float] = rng.standard_normal(8).tolist()
    atoms = signal.atom_number * (1 + noise.atom_number * draw[0]) + noise.floor * draw[1]
    temperature = signal.temperature * (1 + 0.028 * draw[2])
    spread_um = sqrt(BOLTZMANN * temperature * 1e-9 / MASS) * time_of_flight_ms * 1e3
    width = sqrt(TRAP_SIZE_UM**2 + spread_um**2)
    width_x, width_y = width * (1 + 0.009 * draw[3]), 0.97 * width * (1 + 0.009 * draw[4])
    density = CROSS_SECTION * atoms / (2 * pi * width_x * width_y * 1e-12)
    return {
        "atom_number": {"value": round(atoms), "stderr": round(sqrt((0.011 * atoms) ** 2 + noise.floor**2))},
        "temperature": {"value": round(temperature, 1), "stderr": round(0.02 * temperature, 1), "unit": "nK"},
        "width_x": {"value": round(width_x, 2), "stderr": 0.9, "unit": "um"},
        "width_y": {"value": round(width_y, 2), "stderr": 0.9, "unit": "um"},
        "center_x": {"value": round(CENTER_UM[0] + 1.1 * draw[5], 2), "unit": "um"},
        "center_y": {"value": round(signal.center_y + 1.7 * draw[6], 2), "stderr": 1.2, "unit": "um"},
        "optical_depth": round(density, 4),
        "trap_light": {"value": round(2.306 * (1 + 0.003 * draw[7]), 4), "unit": "V"},
    }

"""Where models put the centre of a skewed loss dip: ``python tests/calibration/dips.py``.

A loss feature at a Feshbach resonance is skewed by temperature and saturates. Its loss coefficient is

    K(B) ~ int_0^inf dE sqrt(E) exp(-E / kT) (G/2)^2 / ((E - dmu (B - B0))^2 + (G/2)^2),

the Maxwell-Boltzmann mean of a Breit-Wigner line of width G (in field: G / dmu) whose energy is tuned by the field
(C. Chin et al., Rev. Mod. Phys. 82, 1225 (2010); the mean as for lines of photoassociation, R. Napolitano et al., Phys.
Rev. Lett. 73, 1352 (1994)). Atoms have the energy of the resonance only where it lies above threshold: the tail,
kT / dmu long, is to one side. The atom number after the hold follows from dN/dt = -g N - K N^2. Printed is, for each
length of the tail and depth of the dip, how far each model's centre lies from the deepest point and the deepest point
from the pole B0, in percent of the width of the dip; positive is towards the tail.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from nightfold import fit_many

Array = NDArray[np.float64]
MODELS = ("lorentzian", "gaussian", "voigt", "asymmetric-lorentzian")
TAILS = (0.0, 0.1, 0.3, 1.0, 3.0, 10.0)
"""Length of the thermal tail kT / dmu in units of the width G / dmu."""
DEPTHS = (0.2, 0.6, 0.95)
"""Share of the atoms that is lost at the deepest point."""
POINTS, SCATTER, SETS = 31, 0.05, 300
FINE = 4001
ONE_BODY = 0.05
"""One-body loss over the hold."""


@dataclass(frozen=True)
class Dip:
    """Atom numbers ``y`` over fields ``b``, finely; the pole is at zero, the unit of field is the width G / dmu."""

    b: Array
    y: Array

    @property
    def deepest(self) -> float:
        """Where fewest atoms are left, by a parabola through the lowest three points."""
        j = int(np.argmin(self.y))
        low, mid, high = self.y[j - 1 : j + 2]
        return float(self.b[j] + 0.5 * (self.b[1] - self.b[0]) * (low - high) / (low - 2 * mid + high))

    @property
    def width(self) -> float:
        """Full width at half depth."""
        below = np.flatnonzero(self.y <= (self.y.max() + self.y.min()) / 2)
        return float(self.b[below[-1]] - self.b[below[0]])


def loss_coefficient(b: Array, tail: float) -> Array:
    """Return K(B) of height one; without a tail the bare line."""
    if tail == 0:
        return np.asarray(1 / (1 + 4 * b**2))
    root = np.linspace(0.0, 6.0, 3001)
    energy = tail * root**2
    density = root**2 * np.exp(-(root**2))
    line = 1 / (1 + 4 * (energy[None] - b[:, None]) ** 2)
    mean = np.trapezoid(density * line, root, axis=1)
    return np.asarray(mean / mean.max())


def left(strength: Array) -> Array:
    """Return the share of atoms left after the hold, ``dN/dt = -g N - k N^2`` integrated."""

    def slope(_: float, n: Array) -> Array:
        return np.asarray(-ONE_BODY * n - strength * n**2)

    way = solve_ivp(slope, (0.0, 1.0), np.ones(len(strength)), rtol=1e-9, atol=1e-12)
    return np.asarray(way.y[:, -1])


def make_dip(tail: float, depth: float) -> Dip:
    """Return the dip with a thermal tail and a depth at its deepest point."""
    reach = 8.0 + 12.0 * tail
    b = np.linspace(-reach, reach + 6 * tail, FINE)
    full = left(np.zeros(1))[0]
    strength = brentq(lambda k: left(np.array([k]))[0] - (1 - depth) * full, 1e-3, 1e3)
    grid = np.linspace(0.0, 1.0, 401) ** 2
    y = np.interp(loss_coefficient(b, tail), grid, left(strength * grid))
    return Dip(b, y)


@dataclass(frozen=True)
class Bias:
    """Where a model puts the centre, in units of the width of the dip, and its mean stderr under scatter."""

    deepest: float
    pole: float
    stderr: float


def measure(dip: Dip, model: str) -> Bias:
    """Return the bias of one model: the mean over noisy scans."""
    x = dip.deepest + dip.width * np.linspace(-3.5, 3.5, POINTS)
    curve = np.interp(x, dip.b, dip.y)
    seed = round(1e6 * (abs(dip.deepest) + float(dip.y.min())))
    noise = np.random.default_rng(seed).normal(size=(SETS, POINTS))
    table = fit_many(x, curve * (1 + SCATTER * noise), model, full=True)
    center = table.estimates["center"]
    good = np.isfinite(center.value) & (np.abs(center.value - dip.deepest) < 2 * dip.width)
    middle = float(np.median(center.value[good]))
    stderr = float(np.median(center.stderr[good]))
    return Bias((middle - dip.deepest) / dip.width, middle / dip.width, stderr / dip.width)


def main() -> None:
    """Print the table."""
    print(
        f"centre less deepest point, % of the width of the dip ({POINTS} points over 7 widths, scatter {SCATTER:.0%});"
    )
    print(
        "then spread of the models, stderr of a Lorentzian centre, deepest point less pole, all in the same unit\n"
    )
    print(f"| tail/width | depth | {' | '.join(MODELS)} | spread | stderr | pole to deepest |")
    print("|" + "---|" * (5 + len(MODELS)))
    for tail in TAILS:
        for depth in DEPTHS:
            dip = make_dip(tail, depth)
            found = {model: measure(dip, model) for model in MODELS}
            cells = [f"{100 * found[model].deepest:+.0f}" for model in MODELS]
            places = [bias.deepest for bias in found.values()]
            spread = 100 * (max(places) - min(places))
            stderr = 100 * found["lorentzian"].stderr
            shift = 100 * dip.deepest / dip.width
            print(
                f"| {tail:g} | {depth:.0%} | {' | '.join(cells)} | {spread:.0f} | {stderr:.1f} | {shift:+.0f} |",
                flush=True,
            )


if __name__ == "__main__":
    main()

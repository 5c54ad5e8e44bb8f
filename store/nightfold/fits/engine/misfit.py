"""Do the residuals hold more than scatter? Tests against curves that are free to follow a pattern.

The fit is taken to first order, residuals in units of their scatter. A pattern is looked for in further directions:
each parameter may vary along x, a line's on both sides of its center, an oscillation may have a second harmonic; or,
for drifts, slow cosines in the order of taking. What these explain is compared with what they explain of shuffled
residuals (D. Freedman and D. Lane, J. Bus. Econ. Stat. 1, 292 (1983)), and how far the reported numbers move when
the curve follows them tells whether it matters.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from nightfold.fits.engine.arrays import Floats, Ints
from nightfold.fits.engine.feature import seed_of
from nightfold.fits.engine.warning import FitWarning, chance

if TYPE_CHECKING:
    from nightfold.fits.engine.layout import Layout

LEVEL = 0.006
LEVEL_OTHER = 0.002
"""For the means of repeats and for neighbours, which only add to the first test."""
MATTERS = 1.0
"""Stderr by which a number may move with the pattern and the fit be trusted."""
SLOW = 6
SHUFFLES = 999
MOST_SHUFFLED = 400
"""Points up to which shuffles are worth their time; with more the F distribution will do."""
WORTH_SHUFFLING = 0.05
LEAST_SPARE = 4
LEAST_NEW = 0.03
"""A direction that lies in those already there but for this share is left out."""
LEVERAGE = 0.02


@dataclass(frozen=True)
class Pattern:
    """What a further freedom of the curve explains.

    Attributes
    ----------
    p : float
        Share of shuffled residuals of which it explains as much.
    moved : (R,) float array
        How far the reported coordinates move with it.
    """

    p: float
    moved: Floats


@dataclass(frozen=True)
class Plane:
    """One fit to first order, the points used: n residuals, slopes (n, p), an orthonormal basis (n, r) of them.

    ``u`` (n,) are the points, sorted, ``roots`` (n,) one over their standard deviations, ``change`` (R, p) the change
    of the reported coordinates with the slopes.
    """

    u: Floats
    roots: Floats
    residual: Floats
    slopes: Floats
    basis: Floats
    change: Floats

    @property
    def spare(self) -> int:
        """Degrees of freedom."""
        return int(len(self.residual) - self.basis.shape[1])

    @cached_property
    def shuffled(self) -> Floats:
        """Residuals (SHUFFLES, n) as they would be if points had come by each other's scatter."""
        rest = 1.0 - np.einsum("nk,nk->n", self.basis, self.basis)
        scatter = np.where(
            rest > LEVERAGE, self.residual / np.sqrt(np.maximum(rest, LEVERAGE)), self.residual
        )
        generator = np.random.Generator(np.random.PCG64(seed_of(self.residual)))
        shuffled = generator.permuted(np.broadcast_to(scatter, (SHUFFLES, len(scatter))), axis=1)
        return np.asarray(shuffled - (shuffled @ self.basis) @ self.basis.T)


def make_plane(u: Floats, roots: Floats, residual: Floats, slopes: Floats, change: Floats) -> Plane:
    """Return a fit to first order from residuals (n,) and slopes (p, n) in units of the scatter."""
    columns = np.nan_to_num(slopes.T, posinf=0.0, neginf=0.0)
    size = np.linalg.norm(columns, axis=0)
    left, lengths, _ = np.linalg.svd(columns / np.where(size > 0, size, 1.0), full_matrices=False)
    basis = left[:, lengths > 1e-7 * max(lengths.max(initial=0.0), 1e-300)]
    return Plane(u, roots, residual - basis @ (basis.T @ residual), columns, basis, np.nan_to_num(change))


def seek(plane: Plane, directions: Floats) -> Pattern | None:
    """Return what further directions (n, K) explain; None where there are too few points to tell."""
    spare = plane.spare
    distinct = np.count_nonzero(np.diff(plane.u)) + 1
    most = min(spare // 2, distinct - plane.basis.shape[1])
    if spare < LEAST_SPARE or most < 1:
        return None
    fresh, kept = _fresh(plane.basis, directions, most)
    if not len(kept):
        return None
    from scipy.special import fdtrc

    size = float(plane.residual @ plane.residual)
    gain = float(((plane.residual @ fresh) ** 2).sum())
    count = fresh.shape[1]
    if not size > 0:
        return None
    p = float(fdtrc(count, spare - count, (gain / count) / max((size - gain) / (spare - count), 1e-300)))
    if p < WORTH_SHUFFLING and len(plane.residual) <= MOST_SHUFFLED:
        shuffled = plane.shuffled
        gains = ((shuffled @ fresh) ** 2).sum(axis=1) / np.einsum("rn,rn->r", shuffled, shuffled)
        p = (1 + np.count_nonzero(gains >= gain / size * (1 - 1e-9))) / (1 + SHUFFLES)
    return Pattern(p, _moved(plane, directions[:, kept]))


def _fresh(basis: Floats, directions: Floats, most: int) -> tuple[Floats, Ints]:
    """Return at most so many orthonormal directions (n, k) beyond a basis, and which they come from."""
    out: list[Floats] = []
    kept = []
    for j, direction in enumerate(directions.T):
        size = np.linalg.norm(direction)
        if len(out) == most or not (np.isfinite(size) and size > 0):
            continue
        rest = direction / size
        for _ in range(2):
            rest = rest - basis @ (basis.T @ rest)
            for other in out:
                rest = rest - other * (other @ rest)
        left = np.linalg.norm(rest)
        if left > LEAST_NEW:
            out.append(rest / left)
            kept.append(j)
    return np.array(out).reshape(len(out), len(basis)).T, np.array(kept, dtype=np.intp)


def _moved(plane: Plane, directions: Floats) -> Floats:
    """Return how far the reported coordinates move when the curve follows the directions too."""
    whole = np.concatenate([plane.slopes, directions], axis=1)
    size = np.linalg.norm(whole, axis=0)
    size = np.where(size > 0, size, 1.0)
    found, *_ = np.linalg.lstsq(whole / size, plane.residual, rcond=1e-6)
    return np.asarray(plane.change @ (found / size)[: plane.slopes.shape[1]])


def lack_of_fit(plane: Plane) -> float:
    """Return the p value of an F test of the means of repeats about the curve against the repeats; nan without."""
    from scipy.special import fdtrc

    _, which, count = np.unique(plane.u, return_inverse=True, return_counts=True)
    distinct, n = len(count), len(plane.u)
    between, within = distinct - plane.basis.shape[1], n - distinct
    if between < 1 or within < 3:
        return float("nan")
    means = np.bincount(which, weights=plane.residual) / np.sqrt(count)
    part = float(means @ means)
    rest = float(plane.residual @ plane.residual) - part
    return float(fdtrc(between, within, (part / between) / max(rest / within, 1e-300)))


def neighbours_alike(plane: Plane) -> float:
    """Return the p value of residuals of neighbours along x being no more alike than those of shuffled ones."""
    _, count = np.unique(plane.u, return_counts=True)
    if len(count) < LEAST_SPARE or plane.spare < LEAST_SPARE:
        return float("nan")
    starts = np.concatenate([[0], np.cumsum(count)[:-1]])

    def alike(residuals: Floats) -> Floats:
        means = np.add.reduceat(residuals, starts, axis=1) / np.sqrt(count)
        products = (means[:, 1:] * means[:, :-1]).sum(axis=1)
        return np.asarray(products / np.maximum(np.einsum("rn,rn->r", residuals, residuals), 1e-300))

    found = float(alike(plane.residual[None])[0])
    if not found * np.sqrt(len(plane.residual)) > 1.5:
        return 1.0
    if len(plane.residual) > MOST_SHUFFLED:
        from scipy.special import ndtr

        return float(ndtr(-found * np.sqrt(len(plane.residual))))
    return float((1 + np.count_nonzero(alike(plane.shuffled) >= found)) / (1 + SHUFFLES))


def freedoms(layout: Layout, plane: Plane, theta: Floats) -> Floats:
    """Return directions (n, K) of curves a little unlike the model: its parameters varying along x."""
    u, slopes, shape = plane.u, plane.slopes, layout.shape
    size = np.linalg.norm(slopes, axis=0)
    slopes = slopes / np.where(size > 0, size, 1.0)
    roles = [one.role for one in shape.theta]
    if roles[:2] == ["position", "width"]:
        line = slopes[:, : layout.free_theta.sum() + layout.free_columns[: len(shape.linear)].sum()]
        away = (u - theta[0]) * np.exp(-theta[1])
        return np.asarray(line * (away / np.sqrt(0.25 + away**2))[:, None])
    if roles[:1] == ["frequency"]:
        turn = 4 * np.pi * theta[0] * (u - u[0])
        harmonic = np.column_stack([np.cos(turn), np.sin(turn)]) * plane.roots[:, None]
        return np.concatenate([harmonic, slopes * _along(u)], axis=1)
    if shape.searchable:
        since = np.abs(u)
        return np.asarray(slopes * (since / (since + max(since.mean(), 1e-300)))[:, None])
    return slopes * _along(u)


def _along(u: Floats) -> Floats:
    """Return half a cosine from the first to the last point, (n, 1)."""
    return cosines(np.unique(u, return_inverse=True)[1], 1)


def cosines(rank: Ints | Floats, count: int) -> Floats:
    """Return slow cosines (n, count) of ranks from zero to the largest."""
    place = (np.asarray(rank) + 0.5) / (np.max(rank) + 1.0)
    return np.asarray(np.cos(np.pi * np.outer(place, np.arange(1, count + 1))))


@dataclass(frozen=True)
class Misfit:
    """That residuals hold more than scatter.

    Attributes
    ----------
    p : float
        How often chance makes such residuals.
    repeats : bool
        Whether it is the means of repeats that miss the curve, not a pattern along x.
    name : str
        The reported number that moves most when the curve follows the pattern.
    moved : float
        By how many of its standard uncertainties.
    coarse : bool
        Whether the means of repeats or neighbours alone show it; standard uncertainties then say little.
    """

    p: float
    repeats: bool
    name: str
    moved: float
    coarse: bool


def look(layout: Layout, plane: Plane, theta: Floats, spread: Floats) -> Misfit | None:
    """Return what residuals hold beside scatter, if anything; `spread` (R,) are those of the reported coordinates."""
    directions = freedoms(layout, plane, theta)
    pattern = seek(plane, directions)
    lack, alike = lack_of_fit(plane), neighbours_alike(plane)
    along = pattern is not None and pattern.p <= LEVEL
    if not (along or lack <= LEVEL_OTHER or alike <= LEVEL_OTHER):
        return None
    if not along:
        slow = cosines(np.unique(plane.u, return_inverse=True)[1], SLOW) * plane.roots[:, None]
        pattern = seek(plane, np.concatenate([directions, slow], axis=1))
    free = np.array([name not in layout.fixed for name in layout.names], dtype=bool)
    names = [name for name in layout.names if name not in layout.fixed]
    moved = np.full(len(names), np.inf)
    if pattern is not None:
        moved = np.abs(pattern.moved[: len(free)][free]) / spread[: len(free)][free]
    moved = np.where(np.isnan(moved), 0.0, moved)
    coarse = lack <= LEVEL_OTHER or alike <= LEVEL_OTHER
    most = int(moved.argmax())
    p = pattern.p if along and pattern is not None else min(p for p in (lack, alike) if p == p)
    return Misfit(
        p,
        not along and lack <= LEVEL_OTHER and not alike <= LEVEL_OTHER,
        names[most],
        float(moved[most]),
        coarse,
    )


def poor_fit(found: Misfit | None) -> FitWarning | None:
    """Return what is to be said of it."""
    if found is None:
        return None
    what = (
        "the means of repeats lie off the curve by more than the repeats scatter"
        if found.repeats
        else "the residuals follow a pattern along x"
    )
    how = f"{what} (chance does so in {chance(found.p)} of scans)"
    if found.moved <= MATTERS and not found.coarse:
        return FitWarning(
            "poor-fit",
            f"{how}, but a curve that follows it has the same numbers within their stderr; another model may be better",
            advisory=True,
        )
    return FitWarning(
        "poor-fit",
        f"{how}, and a curve that follows it has a {found.name} {found.moved:.2g} stderr away: the data are not of this"
        " shape, or something drifted; look at the residuals, and fit another model or background"
        if found.moved > MATTERS
        else f"{how}: the data are not of this shape, or something drifted; look at the residuals, and fit another"
        " model or background",
    )

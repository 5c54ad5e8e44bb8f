"""The global start: every place a minimum could hide is looked at, the background projected out."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from nightfold.fits.engine.arrays import AnyArray, Bools, Floats, Ints
from nightfold.fits.engine.layout import Layout
from nightfold.fits.engine.reduction import Reduction
from nightfold.fits.models.shape import Window

MOST_STARTS = 4
MOST_LOOKS = 10
RIVAL_SHARE = 0.35
"""A start is followed unless it explains this share less than the best one: the grid is so fine that no
minimum can gain more than that on its nearest grid point."""
CHUNK = 4_000_000
CACHE = 60_000
DEGENERATE = 1e-9


@dataclass(frozen=True)
class Grid:
    """Start points and what each explains.

    Attributes
    ----------
    theta : (G, P) float array
    templates : (K, G, d) float array
        Orthonormal columns of the shape, orthogonal to the background; zero where degenerate.
    null : (k, d) float array
        Orthonormal columns of the background.
    """

    theta: Floats
    templates: Floats
    null: Floats

    def gains(self, z: Floats) -> Floats:
        """Return what each template explains of whitened, reduced data (B, d), as sums of squares (B, G)."""
        z = z - (z @ self.null.T) @ self.null
        return sum_of_squares(z, self.templates)

    def best_gains(self, z: Floats) -> Floats:
        """Return what the best template explains, (B,), in single precision and chunks that fit the cache."""
        z = z - (z @ self.null.T) @ self.null
        single, templates = z.astype(np.float32), self._single
        step = max(1, CACHE // len(self.theta))
        parts = [sum_of_squares(single[i : i + step], templates).max(axis=1) for i in range(0, len(z), step)]
        return np.concatenate(parts).astype(np.float64)

    @cached_property
    def _single(self) -> AnyArray:
        return self.templates.astype(np.float32)


def sum_of_squares(z: AnyArray, templates: AnyArray) -> AnyArray:
    """Return the squared projections of z (B, d) on templates (K, G, d), summed over K: (B, G)."""
    total: AnyArray = z @ templates[0].T
    total *= total
    for template in templates[1:]:
        more = z @ template.T
        more *= more
        total += more
    return total


def place_starts(layout: Layout, window: Window, given: Floats) -> Floats:
    """Return the start grid (G, P) with the coordinates in `given` (not nan) held at their values."""
    theta = layout.shape.grid(window)
    held = np.isfinite(given)
    if held.any():
        theta[:, held] = given[held]
        theta = np.unique(theta, axis=0)
    return theta


def orthonormal(columns: Floats, against: Floats) -> Floats:
    """Return columns (G, K, d) made orthonormal and orthogonal to rows (k, d), zero where degenerate."""
    out = columns.copy()
    for k in range(out.shape[1]):
        before = np.einsum("gd,gd->g", out[:, k], out[:, k])
        for _ in range(2):
            if len(against):
                out[:, k] -= (out[:, k] @ against.T) @ against
            for other in range(k):
                overlap = np.einsum("gd,gd->g", out[:, k], out[:, other])
                out[:, k] -= overlap[:, None] * out[:, other]
        after = np.einsum("gd,gd->g", out[:, k], out[:, k])
        good = after > DEGENERATE * before
        out[:, k] *= np.where(good, 1.0 / np.sqrt(np.where(good, after, 1.0)), 0.0)[:, None]
    return out


def make_grid(layout: Layout, reduction: Reduction, theta: Floats, null: str) -> Grid:
    """Return the grid of a layout on reduced points, against a background of "none", "flat" or "sloped"."""
    d = len(reduction.u)
    rows = [reduction.roots][: null != "none"] + [reduction.roots * reduction.u][: null == "sloped"]
    against = orthonormal(np.array(rows).reshape(len(rows), 1, d).transpose(1, 0, 2), np.zeros((0, d)))[0]
    step = max(1, CHUNK // d)
    parts = [
        orthonormal(layout.shape.templates(reduction.u[None], theta[i : i + step]) * reduction.roots, against)
        for i in range(0, len(theta), step)
    ]
    return Grid(theta, np.ascontiguousarray(np.concatenate(parts).transpose(1, 0, 2)), against)


def general_sse(
    layout: Layout, reduction: Reduction, theta: Floats, z: Floats, c: Floats, shift: float
) -> Floats:
    """Return the sum of squares (G,) of one data set at each grid point when coefficients are fixed."""
    columns = layout.columns(reduction.u[None], theta, np.array([[shift]])) * reduction.roots
    target = z - np.einsum("l,gld->gd", c, columns)
    templates = orthonormal(columns[:, layout.free_columns], np.zeros((0, len(z))))
    explained = np.einsum("gkd,gd->gk", templates, target) ** 2
    return np.asarray(np.einsum("gd,gd->g", target, target) - explained.sum(axis=1))


def choose_starts(layout: Layout, theta: Floats, sse: Floats, reference: Floats) -> tuple[Ints, Ints]:
    """Return which starts to follow: the best, and distant local minima on the grid that may beat it.

    Parameters
    ----------
    theta : (G, P) float array
    sse : (B, G) float array
    reference : (B,) float array
        Sum of squares about the background alone.

    Returns
    -------
    sets, points : (M,) int arrays
        Data set and grid point of each start, sorted by data set, the best start of each first.
    """
    rows = np.arange(len(sse))
    points = np.argmin(sse, axis=1)
    limit = sse[rows, points]
    limit = limit + RIVAL_SHARE * np.maximum(reference - limit, 0.0)
    possible = sse <= limit[:, None]
    chosen, taken = [(rows, points)], np.ones(len(sse), dtype=np.intp)
    near = _near_each(layout, theta, points)
    for _ in range(MOST_LOOKS):
        possible &= ~near
        some = possible.any(axis=1) & (taken < MOST_STARTS)
        if not some.any():
            break
        rows, sse, possible, taken = rows[some], sse[some], possible[some], taken[some]
        points = np.argmin(np.where(possible, sse, np.inf), axis=1)
        near = _near_each(layout, theta, points)
        top = np.where(near, sse, np.inf).min(axis=1) >= sse[np.arange(len(sse)), points]
        chosen.append((rows[top], points[top]))
        taken = taken + top
    sets = np.concatenate([pair[0] for pair in chosen])
    order = np.argsort(sets, kind="stable")
    return sets[order], np.concatenate([pair[1] for pair in chosen])[order]


def _near_each(layout: Layout, theta: Floats, points: Ints) -> Bools:
    """Return which grid points lead to the same minimum as each of some, (len(points), G)."""
    distinct, which = np.unique(points, return_inverse=True)
    near = layout.shape.near(theta[None], theta[distinct][:, None])
    return near[which]

"""Functions known only by their values, one data set at a time: MINPACK on the projected problem.

The coefficients are solved for at every theta as in `solver`; theta follows the trust region of J. J. Moré (Lecture
Notes in Mathematics 630, 105 (1978)) as scipy's `leastsq` has it, with a first step of a tenth of the start: a start
that somebody gave is not left further than that at once. Where there are bounds, scipy's `least_squares` does it (M. A.
Branch et al., SIAM J. Sci. Comput. 21, 1 (1999)). Undamped steps then go on as long as they shrink.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular
from scipy.optimize import least_squares, leastsq

from nightfold.fits.engine.arrays import Bools, Floats
from nightfold.fits.engine.data import DataSets
from nightfold.fits.engine.layout import Layout

FIRST_STEP = 0.1
"""Of the start, in units of the columns' sizes; MINPACK's own value of 100 jumps over poles."""
TIGHT = 1e-15
MAX_CALLS = 2000
POLISHING = 30
SETTLED = 1e-9
"""At a minimum the next step promises less than this share of the sum of squares."""
ROUNDING = 1e-24
"""Residuals this small, relative to the data squared, are rounding."""
FAR = 1e100
"""Stands for residuals that are not numbers, so that no step ends there."""


@dataclass(frozen=True)
class Projection:
    """The problem at one theta: coefficients (L,), residual (n,), orthonormal free columns (n, K)."""

    c: Floats
    residual: Floats
    q: Floats


class Problem:
    """One data set seen as a function of the free theta alone."""

    def __init__(
        self, layout: Layout, data: DataSets, theta: Floats, gradient: Callable[..., Floats]
    ) -> None:
        self.layout, self.data, self.gradient = layout, data, gradient
        self.start = theta
        self.free = layout.free_theta
        self.roots = np.ones(data.z.shape[1]) if data.root_weights is None else data.root_weights[0]
        self._last: tuple[bytes, Projection] | None = None

    def whole(self, free: Floats) -> Floats:
        """Return all theta, (P,)."""
        theta = self.start.copy()
        theta[self.free] = free
        return theta

    def project(self, free: Floats) -> Projection:
        """Return the problem with the coefficients solved for."""
        key = free.tobytes()
        if self._last is None or self._last[0] != key:
            self._last = key, self._project(free)
        return self._last[1]

    def _project(self, free: Floats) -> Projection:
        columns = self.layout.columns(self.data.u[:1], self.whole(free)[None], self.data.shift[:1])[0]
        columns = columns * self.roots
        c = self.data.coefficients[0].copy()
        residual = self.data.z[0] - c @ columns
        chosen = columns[self.layout.free_columns]
        size = np.linalg.norm(chosen, axis=1)
        if not (np.isfinite(size).all() and np.isfinite(residual).all()):
            return Projection(c, np.full_like(residual, FAR), np.zeros((len(residual), 0)))
        if not len(chosen):
            return Projection(c, residual, np.zeros((len(residual), 0)))
        size[size == 0] = 1.0
        q, r, order = qr((chosen / size[:, None]).T, mode="economic", pivoting=True)
        rank = _rank(r)
        q = q[:, :rank]
        part = np.zeros(len(chosen))
        part[order[:rank]] = solve_triangular(r[:rank, :rank], q.T @ residual)
        c[self.layout.free_columns] = part / size
        residual = residual - q @ (q.T @ residual)
        return Projection(c, residual - q @ (q.T @ residual), q)

    def residual(self, free: Floats) -> Floats:
        """Return the residuals, (n,)."""
        return self.project(free).residual

    def jacobian(self, free: Floats) -> Floats:
        """Return their derivatives for the free theta, (n, p), in Kaufman's form."""
        at = self.project(free)
        slopes = self.gradient(self.data.u[0], self.whole(free), at.c)[self.free] * self.roots
        across = slopes.T - at.q @ (at.q.T @ slopes.T)
        return np.where(np.isfinite(across), -across, 0.0)

    def step(self, free: Floats, low: Floats, high: Floats) -> tuple[Floats, float]:
        """Return the undamped step, none out of the bounds from there, and the fall of the squares it promises."""
        jacobian, residual = self.jacobian(free), self.residual(free)
        down = jacobian.T @ residual
        jacobian[:, ((free <= low) & (down > 0)) | ((free >= high) & (down < 0))] = 0.0
        size = np.linalg.norm(jacobian, axis=0)
        size[size == 0] = 1.0
        q, r, order = qr(jacobian / size, mode="economic", pivoting=True)
        rank = _rank(r)
        pull = -(q[:, :rank].T @ residual)
        step = np.zeros(len(free))
        step[order[:rank]] = solve_triangular(r[:rank, :rank], pull)
        return step / size, float(pull @ pull)


def _rank(r: Floats) -> int:
    level = np.abs(np.diag(r))
    return int(np.sum(level > 1e-14 * level[0])) if level[0] > 0 else 0


def solve_each(layout: Layout, data: DataSets, theta: Floats) -> tuple[Floats, Floats, Bools, Bools]:
    """Return theta, sum of squares, whether a minimum was found, and which theta are at a bound.

    Parameters
    ----------
    data : DataSets
        M data sets, one for each start.
    theta : (M, P) float array
        Starts; fixed coordinates hold their fixed values.
    """
    ends, sse = theta.copy(), np.full(len(theta), np.inf)
    converged, bound = np.zeros(len(theta), dtype=bool), np.zeros(theta.shape, dtype=bool)
    for m in range(len(theta)):
        one = data.take(np.array([m]))
        low, high = one.low[0], one.high[0]
        problem = Problem(layout, one, theta[m], layout.shape.gradient)
        free, sse[m], converged[m] = _solve_one(problem, low[problem.free], high[problem.free])
        ends[m] = problem.whole(free)
        bound[m] = problem.free & ((ends[m] <= low) | (ends[m] >= high))
    return ends, sse, converged, bound


def _solve_one(problem: Problem, low: Floats, high: Floats) -> tuple[Floats, float, bool]:
    start = problem.start[problem.free]
    if len(start) and np.abs(problem.residual(start)).max() < FAR:
        start = _descend(problem, start, low, high)
    free, promise = _polish(problem, start, low, high)
    residual = problem.residual(free)
    sse = float(residual @ residual)
    if sse >= FAR:
        return free, np.inf, False
    exact = ROUNDING * float(problem.data.z[0] @ problem.data.z[0])
    return free, sse, promise <= SETTLED * sse or sse <= exact


def _descend(problem: Problem, start: Floats, low: Floats, high: Floats) -> Floats:
    if len(start) > problem.data.z.shape[1]:
        return start
    if np.isfinite(low).any() or np.isfinite(high).any():
        found = least_squares(
            problem.residual,
            np.clip(start, low, high),
            problem.jacobian,
            bounds=(low, high),
            x_scale="jac",
            ftol=TIGHT,
            xtol=TIGHT,
            gtol=TIGHT,
            max_nfev=MAX_CALLS // 10,
        )
        inner = 1e-9 * (1.0 + np.abs(found.x))
        end = np.where(found.x - low < inner, low, found.x)
        return np.asarray(np.where(high - end < inner, high, end))
    end, *_ = leastsq(
        problem.residual,
        start,
        Dfun=problem.jacobian,
        full_output=True,
        ftol=TIGHT,
        xtol=TIGHT,
        gtol=0.0,
        maxfev=MAX_CALLS,
        factor=FIRST_STEP,
    )
    return np.asarray(end)


def _polish(problem: Problem, free: Floats, low: Floats, high: Floats) -> tuple[Floats, float]:
    """Return where undamped steps lead while each promises less than half of the one before, and the promise."""
    if not len(free):
        return free, 0.0
    step, promise = problem.step(free, low, high)
    sse = float(problem.residual(free) @ problem.residual(free))
    rounding = 1e-15 * float(np.linalg.norm(problem.data.z[0]))
    for _ in range(POLISHING):
        if promise > SETTLED * sse:
            break
        moved = np.clip(free + step, low, high)
        next_step, next_promise = problem.step(moved, low, high)
        fell = float(problem.residual(moved) @ problem.residual(moved))
        if not (next_promise < 0.5 * promise and fell <= sse * (1 + 1e-12) + rounding * np.sqrt(sse)):
            break
        free, step, promise = moved, next_step, next_promise
    return free, promise

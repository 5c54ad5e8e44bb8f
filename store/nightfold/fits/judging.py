"""The facts of each fit brought together for the checks of `engine.trust`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.feature import LEVEL
from nightfold.fits.engine.links import to_coordinate, to_value
from nightfold.fits.engine.misfit import Plane, look, make_plane
from nightfold.fits.engine.points import Points
from nightfold.fits.engine.rivals import APART, LEAST_ODDS, Rival, Rivals, find_rivals
from nightfold.fits.engine.robust import TRIED, TRIED_STATED
from nightfold.fits.engine.sampling import Sampling
from nightfold.fits.engine.tangent import Tangent, tangent
from nightfold.fits.engine.trust import Facts, judge, left_out
from nightfold.fits.engine.variance import EQUAL, STATED
from nightfold.fits.engine.wander import wander
from nightfold.fits.engine.warning import FitWarning
from nightfold.fits.fitting import Outcome
from nightfold.fits.groups import Group
from nightfold.fits.result import FitResult

ANSWERS = ("position", "width", "rate", "frequency")
"""Roles of what a fit is about: another minimum is another answer if one of these differs."""


def judge_fits(outcome: Outcome, x: Floats, started: Floats | None) -> list[tuple[FitWarning, ...]]:
    """Return the warnings of each fit.

    Parameters
    ----------
    x : (n,) float array
        As handed in.
    started : (n,) float array or None
        When each point was taken; only the order counts; nan where it is not known.
    """
    found: list[tuple[FitWarning, ...]] = [()] * len(outcome.low)
    for row in np.flatnonzero(~np.isfinite(outcome.low)):
        found[row] = (FitWarning("too-few-points", outcome.shortage(int(row))),)
    with np.errstate(all="ignore"):
        for group in outcome.groups:
            about = _tangent(outcome, group)
            judging = _Judging(outcome, x, started, group, about, _rivals(outcome, group))
            for place, row in enumerate(group.rows.tolist()):
                found[row] = judge(judging.facts(place, row))
    return found


def name_outliers(result: FitResult, uids: Sequence[str]) -> FitResult:
    """Return a result whose warning of outliers names these by the uids of the shots, n of them as handed in."""
    if not result.outliers:
        return result
    which = ", ".join(
        uids[index] for index in np.array(result.outliers)[np.argsort(result.outlier_x, kind="stable")]
    )
    said = left_out(result.outlier_x.tolist(), which, result.request.unit_x)
    return replace(result, warnings=tuple(said if w.code == said.code else w for w in result.warnings))


def _tangent(outcome: Outcome, group: Group) -> Tangent:
    """Return the fits of a group to first order, with what a point is known to scatter by."""
    frame = group.data.frame
    deviation = np.take_along_axis(outcome.deviation[group.rows], group.place, axis=1) / frame.ys[:, None]
    plain = np.asarray(np.isnan(deviation).all(axis=1))
    if plain.any():
        scale = np.sqrt(outcome.variance[group.rows])[:, None] / frame.ys[:, None]
        alike = np.where(scale > 0, scale, 1.0) / group.roots
        if outcome.request.absolute and group.stated is not None:
            alike = group.stated
        deviation = np.where(plain[:, None], alike, deviation)
    deviation = np.where(deviation > 0, deviation, np.inf)
    return tangent(outcome.request.layout, group.data, outcome.theta[group.rows], deviation)


def _rivals(outcome: Outcome, group: Group) -> Rivals | None:
    """Return the best other minima of a group."""
    request, data = outcome.request, group.data
    layout = request.layout
    if not layout.shape.searchable or not layout.free_theta.any():
        return None
    origin, starts = group.starts()
    used = ~np.take_along_axis(outcome.outlier[group.rows], group.place, axis=1)
    values = data.z if data.root_weights is None else data.z / data.root_weights
    points = Points(data, values, used, None if group.stated is None else group.stated**2)
    laws = TRIED_STATED if group.stated is not None else TRIED
    if request.weighted or request.weights == "equal":
        laws = STATED if request.weighted else EQUAL
    return find_rivals(layout, points, outcome.theta[group.rows], origin, starts, laws)


@dataclass(frozen=True)
class _Judging:
    """A group of fits being judged."""

    outcome: Outcome
    x: Floats
    started: Floats | None
    group: Group
    about: Tangent
    rivals: Rivals | None

    def facts(self, place: int, row: int) -> Facts:
        """Return the facts of one fit, the `place`-th of the group."""
        out, layout = self.outcome, self.outcome.request.layout
        names = layout.names
        known = slice(len(names))
        value, stderr, spread, unlike = (
            dict(zip(names, array[row, known].tolist(), strict=True))
            for array in (out.value, out.stderr, out.spread, out.unlike)
        )
        thetas = layout.shape.theta
        roles: dict[str, str] = {theta.name: theta.role for theta in thetas if theta.name not in layout.fixed}
        bound = tuple(t.name for t, held in zip(thetas, out.bound[row], strict=True) if held)
        facts = Facts(
            layout.shape.name,
            value,
            stderr,
            spread,
            roles,
            bound,
            float(out.low[row]),
            float(out.high[row]),
            int(out.count[row]),
            float(out.dof[row]),
            bool(out.converged[row]),
            float(out.feature_p[row]),
            layout.shape.searchable,
            bool(out.constant[row]),
            out.request.unit_x,
            tuple(self.x[out.outlier[row]].tolist()),
            unlike,
        )
        if facts.constant:
            return facts
        return self._with_residuals(facts, place, row)

    def _with_residuals(self, facts: Facts, place: int, row: int) -> Facts:
        """Return the facts with what sampling and residuals tell."""
        layout = self.outcome.request.layout
        used = self.group.place[place][self.about.roots[place] > 0]
        facts = replace(facts, sampling=self._sampling(facts, self.x[used]), rival=self._rival(place, row))
        if not facts.feature_p <= LEVEL or not facts.spare > 0:
            return facts
        plane = self._plane(place)
        misfit = look(layout, plane, self.outcome.theta[row], self.outcome.spread[row])
        times = None if self.started is None else wander(plane, self.started[used])
        return replace(facts, misfit=misfit, wander=times, stated=self._stated(plane))

    def _rival(self, place: int, row: int) -> Rival | None:
        """Return another minimum that is another answer and nearly as good."""
        found, out = self.rivals, self.outcome
        if found is None or not found.odds[place] < LEAST_ODDS:
            return None
        layout = out.request.layout
        links = layout.links
        roles: dict[str, str] = {}
        value: dict[str, float] = {}
        for theta in layout.shape.theta:
            at = layout.names.index(theta.name)
            mine = float(to_coordinate(out.value[row, at], links[at]))
            away = abs(float(found.q[place, at]) - mine)
            if theta.role in ANSWERS and away > APART * out.spread[row, at]:
                roles[theta.name] = theta.role
                value[theta.name] = float(to_value(found.q[place, at], links[at]))
        return Rival(float(np.exp(found.odds[place])), value, roles) if value else None

    def _plane(self, place: int) -> Plane:
        about = self.about
        used = about.roots[place] > 0
        return make_plane(
            about.u[used],
            about.roots[place, used],
            about.residual[place, used],
            about.slopes[place][:, used],
            about.change[place],
        )

    def _stated(self, plane: Plane) -> tuple[float, float] | None:
        """Return how points scatter compared with uncertainties taken at face value, and how improbable that is."""
        from scipy.special import chdtr, chdtrc

        if not self.outcome.request.absolute or plane.spare < 1:
            return None
        squares = float(plane.residual @ plane.residual)
        tail = chdtrc if squares > plane.spare else chdtr
        return float(np.sqrt(squares / plane.spare)), float(tail(plane.spare, squares))

    def _sampling(self, facts: Facts, x: Floats) -> Sampling:
        """Return where the points lie about what was found."""
        request = self.outcome.request
        by_role = {role: name for name, role in facts.roles.items()}
        position, width, rate, frequency = (
            by_role.get(role) for role in ("position", "width", "rate", "frequency")
        )
        time = None
        powers = {theta.name: theta.power * theta.sign for theta in request.layout.shape.theta}
        if rate == "lifetime" or (rate is not None and powers[rate] < 0 and rate.endswith("_rate")):
            time = facts.value[rate] if rate == "lifetime" else 1 / facts.value[rate]
        return Sampling(
            x,
            None if position is None else facts.value[position],
            None if position is None else facts.value[width] if width else facts.value.get("fwhm"),
            time,
            None if frequency is None else facts.value[frequency],
            frequency in request.start,
        )

"""Models of the same data side by side: how likely each is, what each says, and how far they disagree."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from nightfold.errors import FitError
from nightfold.fits.principal import chosen_estimate, principal_estimate

if TYPE_CHECKING:
    import pandas as pd

    from nightfold.fits.engine.arrays import Floats
    from nightfold.fits.estimate import Estimate
    from nightfold.fits.many import FitTable
    from nightfold.fits.result import FitResult

_COUNTS = 0.05
"""A model of less weight does not make the combined number doubtful."""


@dataclass(frozen=True)
class Candidate:
    """One model of a comparison.

    Attributes
    ----------
    model, background : str
    free : int
        Number of fitted parameters, the scatter not counted.
    aicc, delta, weight : float
        The criterion, what it is above the best one, and the share of belief; infinite, infinite and 0 where there are
        too few points for it.
    estimate : Estimate or None
        What is compared, of this model; its own first position, rate or time where models have none in common.
    name : str
        Which estimate that is.
    trusted : bool
    """

    model: str
    background: str
    free: int
    aicc: float
    delta: float
    weight: float
    name: str
    estimate: Estimate
    trusted: bool

    def row(self) -> dict[str, Any]:
        """Return what there is to tell of it, by name."""
        return {
            "model": self.model,
            "background": self.background,
            "free": self.free,
            "aicc": self.aicc,
            "delta": self.delta,
            "weight": self.weight,
            "estimate": self.name,
            "value": self.estimate.value,
            "stderr": self.estimate.stderr,
            "unit": self.estimate.unit,
            "trusted": self.trusted,
        }


@dataclass(frozen=True)
class Combined:
    """An estimate averaged over models.

    Attributes
    ----------
    value : float
    stderr : float
        The statistical part of its standard uncertainty.
    model_stderr : float
        The part that comes from not knowing the model.
    unit : str
    trusted : bool
        Whether all models with a weight of 5 % or more are trusted.
    """

    value: float
    stderr: float
    model_stderr: float
    unit: str
    trusted: bool

    @property
    def total_stderr(self) -> float:
        """Both parts together."""
        return float(np.hypot(self.stderr, self.model_stderr))


@dataclass(frozen=True)
class Comparison:
    """Models fitted to the same data.

    Attributes
    ----------
    candidates : tuple of Candidate
        In the order handed in.
    estimate : str or None
        What is compared; None where the models have no such estimate in common.
    combined : Combined or None
        None where nothing can be combined.
    n : int
        Points that the criterion rests on: those that every fit used.
    where : dict
        Of a slice: the values of the other axes.
    """

    candidates: tuple[Candidate, ...]
    estimate: str | None
    combined: Combined | None
    n: int
    where: Mapping[str, Any] = field(default_factory=dict)

    @property
    def best(self) -> Candidate:
        """The model of the largest weight."""
        return max(self.candidates, key=lambda candidate: candidate.weight)

    @property
    def spread(self) -> float:
        """Largest less smallest value among the models, whatever their weights; nan where nothing is compared."""
        if self.estimate is None:
            return float("nan")
        values = [candidate.estimate.value for candidate in self.candidates]
        return max(values) - min(values)

    def table(self) -> pd.DataFrame:
        """Return a row a model."""
        import pandas as pd

        return pd.DataFrame([each.row() for each in self.candidates])


def compare_fits(
    results: Sequence[FitResult], *, estimate: str | None = None, stderr: ArrayLike | None = None
) -> Comparison:
    """Return fits of several models to the same data side by side.

    Parameters
    ----------
    results : sequence of FitResult
        Of the same points; outliers may differ.
    estimate : str, optional
        Which estimate to compare; by default the position, rate or time that the first model is about, where all have
        it.
    stderr : float array, optional
        Of the points handed in, needed only for fits with given weights by `fit_many` without ``full``.

    Raises
    ------
    FitError
        If there are fewer than two fits, or these are of different points.
    NotFound
        If a model does not have the estimate asked for.

    Notes
    -----
    AICc = -2 ln L + 2 K + 2 K (K + 1) / (n - K - 1), with L the normal likelihood of the points that every fit used,
    its scale at its maximum, and K the fitted parameters and the scale (K. P. Burnham and D. R. Anderson, *Model
    Selection and Multimodel Inference*, 2nd ed. (2002), sections 2.4 and 7.7.6). With equal weights -2 ln L is
    n ln(SSE / n) and a constant. Weights are exp(-delta / 2), made to sum to one (section 2.9). The combined value is
    the weighted mean, and its variance sum w (stderr^2 + (value - mean)^2) (equation 6.12), the two terms of which are
    kept apart.
    """
    if len(results) < 2:
        raise FitError(f"comparison: found {len(results)} fit, wanted two or more models of the same data")
    common = _common_points(results)
    criteria = np.array([_criterion(result, common, stderr) for result in results])
    weights, deltas = _weights(criteria)
    name = _compared(results, estimate)
    candidates = tuple(
        Candidate(
            result.model,
            result.background,
            len(result.free_names),
            float(criterion),
            float(delta),
            float(weight),
            own := name or principal_estimate(result.request),
            (result.estimates | result.derived)[own],
            result.trusted,
        )
        for result, criterion, delta, weight in zip(results, criteria, deltas, weights, strict=True)
    )
    return Comparison(candidates, name, None if name is None else _combine(candidates), len(common))


def compare_outcomes(
    outcomes: Sequence[FitResult | FitTable], estimate: str | None = None
) -> Comparison | list[Comparison]:
    """Return what `Store.compare` does, of the fits that it made."""
    from dataclasses import replace

    from nightfold.fits.many import FitTable

    tables = [outcome for outcome in outcomes if isinstance(outcome, FitTable)]
    if not tables:
        return compare_fits([each for each in outcomes if not isinstance(each, FitTable)], estimate=estimate)
    return [
        replace(compare_fits([table.result(row) for table in tables], estimate=estimate), where=dict(where))
        for row, where in enumerate(tables[0].slices)
    ]


def _common_points(results: Sequence[FitResult]) -> list[int]:
    """Return the indices of the points that every fit used."""
    seen: list[dict[int, tuple[float, float]]] = []
    for result in results:
        rows = [*result.used.tolist(), *result.outliers]
        points = zip([*result.x, *result.outlier_x], [*result.y, *result.outlier_y], strict=True)
        seen.append(dict(zip(rows, points, strict=True)))
    if any(points != seen[0] for points in seen[1:]):
        raise FitError("comparison: the fits are of different points; wanted fits of the same data")
    used = [set(result.used.tolist()) for result in results]
    return sorted(set.intersection(*used))


def _criterion(result: FitResult, common: Sequence[int], stderr: ArrayLike | None) -> float:
    """Return AICc; infinite where there are too few points for it."""
    place = {row: number for number, row in enumerate(result.used.tolist())}
    rows = np.array([place[row] for row in common], dtype=np.intp)
    n, absolute = len(rows), bool(result.settings["absolute_stderr"])
    count = len(result.free_names) + (0 if absolute else 1)
    if n - count - 1 <= 0:
        return float("inf")
    scale = _scales(result, rows, stderr)
    with np.errstate(all="ignore"):
        squares = float(np.sum((result.residuals[rows] / scale) ** 2))
        fitted = squares + n * np.log(2 * np.pi) if absolute else n * (np.log(2 * np.pi * squares / n) + 1)
        value = fitted + 2 * float(np.sum(np.log(scale)))
    value += 2 * count + 2 * count * (count + 1) / (n - count - 1)
    return float(value) if np.isfinite(value) else float("inf")


def _scales(result: FitResult, rows: Any, stderr: ArrayLike | None) -> Floats:
    """Return how the standard deviations of points compare: as learnt, as given, or all equal."""
    learnt: Floats = result.deviation[rows]
    if result.settings["absolute_stderr"] or (result.request.weighted and not np.isfinite(learnt).all()):
        if stderr is None:
            raise FitError("comparison: these fits had given weights; pass stderr= again")
        given: Floats = np.asarray(stderr, dtype=np.float64)
        return np.asarray(given[result.used[rows]])
    return np.asarray(learnt) if np.isfinite(learnt).all() else np.ones(len(rows))


def _weights(criteria: Floats) -> tuple[Floats, Floats]:
    """Return the weights and the differences from the best."""
    if not np.isfinite(criteria).any():
        return np.full(len(criteria), np.nan), np.full(len(criteria), np.nan)
    deltas = criteria - criteria.min()
    belief = np.exp(-deltas / 2)
    return belief / belief.sum(), deltas


def _compared(results: Sequence[FitResult], asked: str | None) -> str | None:
    if asked is not None:
        for result in results:
            chosen_estimate([*result.estimates, *result.derived], result.request, asked)
        return asked
    name = principal_estimate(results[0].request)
    return name if all(name in result.estimates for result in results) else None


def _combine(candidates: Sequence[Candidate]) -> Combined | None:
    """Return the average over the models that have a value; None where none has a weight."""
    kept = [
        each
        for each in candidates
        if each.weight > 0 and np.isfinite(each.estimate.value) and np.isfinite(each.estimate.stderr)
    ]
    if not kept:
        return None
    weight = np.array([each.weight for each in kept])
    weight /= weight.sum()
    value = np.array([each.estimate.value for each in kept])
    stderr = np.array([each.estimate.stderr for each in kept])
    origin = float(value[0])
    mean = origin + float(weight @ (value - origin))
    return Combined(
        mean,
        float(np.sqrt(weight @ stderr**2)),
        float(np.sqrt(weight @ (value - mean) ** 2)),
        kept[0].estimate.unit,
        all(each.trusted for each in candidates if not each.weight < _COUNTS),
    )

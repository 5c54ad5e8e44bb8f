"""Many fits in one call."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from nightfold.errors import FitError
from nightfold.fits.engine.arrays import Bools, Floats, Ints
from nightfold.fits.engine.links import bends
from nightfold.fits.engine.warning import FitWarning
from nightfold.fits.estimate import EstimateColumn, compose_unit
from nightfold.fits.fitting import Outcome, fit_sets
from nightfold.fits.judging import judge_fits
from nightfold.fits.request import (
    Times,
    as_points,
    check_shared,
    check_span,
    check_stderr,
    check_times,
    make_request,
)
from nightfold.fits.result import FitResult

if TYPE_CHECKING:
    import xarray as xr

    from nightfold.fits.models.shape import Parameter


def fit_many(
    x: ArrayLike,
    Y: ArrayLike,
    model: object,
    *,
    full: bool = False,
    stderr: ArrayLike | None = None,
    shared: ArrayLike | None = None,
    absolute_stderr: bool = False,
    background: str | None = None,
    fixed: Mapping[str, float] | None = None,
    start: Mapping[str, float] | None = None,
    weights: str = "auto",
    robust: bool = True,
    unit_x: str = "",
    unit_y: str = "",
    started: Times | None = None,
) -> FitTable:
    """Return the fits of one model to many data sets that share x, all at once.

    Parameters
    ----------
    x : (n,) float array
    Y : (B, n) float array
        One data set a row; nan points are left out.
    model, absolute_stderr, background, fixed, start, weights, robust, unit_x, unit_y, started
        As in `fit_curve`.
    full : bool
        The full recipe of `fit_curve`: outliers are looked for and variance laws averaged, as `robust` and
        `weights` say. Otherwise least squares with equal (or given) weights and Student t intervals, at a small part of
        the time.
    stderr : float, (n,) or (B, n) float array, optional
        Standard uncertainties of y.
    shared : (n, m) or (B, n, m) float array, optional
        As in `fit_curve`.

    Returns
    -------
    FitTable
        With `full` the same numbers as `fit_curve` gives for each row. A row with too few points has nan estimates and
        a ``too-few-points`` warning.

    Raises
    ------
    FitError
        When the request cannot be met, as in `fit_curve`.
    NotFound
        When no model has that name.
    """
    points, values = as_points("x", x, 1), as_points("Y", Y, 2)
    if values.shape[1] != len(points):
        raise FitError(f"Y: found shape {values.shape}, wanted one column for each of the {len(points)} x")
    check_span("x", points)
    errors = check_stderr(stderr, values.shape)
    options: dict[str, Any] = {
        "absolute_stderr": absolute_stderr,
        "background": background,
        "fixed": fixed,
        "start": start,
        "weights": weights,
        "robust": robust,
        "unit_x": unit_x,
        "unit_y": unit_y,
    }
    common, times = check_shared(shared, values.shape), check_times(started, len(points))
    return fit_table(points, values, model, errors, options, full, common, times)


def fit_table(
    x: Floats,
    Y: Floats,
    model: object,
    stderr: Floats | None,
    options: dict[str, Any],
    full: bool,
    shared: Floats | None = None,
    started: Floats | None = None,
) -> FitTable:
    """Return the fits of checked arrays; options as in `make_request`."""
    first = Y[0] if len(Y) else np.zeros_like(x)
    request = make_request(model, x, first, has_stderr=stderr is not None, **options)
    return FitTable(x, Y, fit_sets(request, x, Y, stderr, full, shared), started)


@dataclass(frozen=True, repr=False)
class FitTable:
    """Fits of one model to B data sets.

    Attributes
    ----------
    x : (n,) float array
    Y : (B, n) float array
        As handed in.
    outcome : Outcome
        The arrays behind the properties.
    started : (n,) float array, optional
        When the points were taken.
    slices : tuple of dict
        Of fits along one axis of a scan: the values of the other axes, one dict a row. Empty otherwise.
    slice_units : mapping of str to str
        Units of the other axes.
    about : mapping of str to str
        What was fitted: ``scan``, ``machine``, ``observable`` and ``along``, of fits of a scan.
    """

    x: Floats
    Y: Floats
    outcome: Outcome
    started: Floats | None = None
    slices: tuple[dict[str, Any], ...] = ()
    slice_units: Mapping[str, str] = field(default_factory=dict)
    about: Mapping[str, str] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.Y)

    def __repr__(self) -> str:
        return f"<FitTable {self.model}, {len(self)} fits of {', '.join(self.estimates)}>"

    @property
    def model(self) -> str:
        """Name of the model."""
        return self.outcome.request.model

    @property
    def background(self) -> str:
        """Style of the background: none, flat or sloped."""
        return self.outcome.request.layout.background

    @property
    def settings(self) -> dict[str, Any]:
        """What it takes to fit again."""
        return self.outcome.request.settings

    @property
    def free_names(self) -> tuple[str, ...]:
        """Names of the fitted parameters, in the order of the covariances."""
        return self.outcome.request.layout.free_names

    @property
    def n(self) -> Ints:
        """Number of points used, (B,)."""
        return self.outcome.count

    @property
    def dof(self) -> Ints:
        """Points less free parameters, (B,)."""
        return self.outcome.count - self.outcome.request.layout.free_count

    @property
    def residual_stderr(self) -> Floats:
        """Scatter of a point about the curve, (B,), unit of y."""
        return np.sqrt(self.outcome.variance)

    @property
    def covariances(self) -> Floats:
        """Covariances of the fitted parameters, (B, F, F)."""
        return self.outcome.covariance

    @property
    def converged(self) -> Bools:
        """Whether each fit settled on a minimum, (B,)."""
        return self.outcome.converged

    @cached_property
    def estimates(self) -> dict[str, EstimateColumn]:
        """The model's parameters, then the background's, by name."""
        return {p.name: self._column(row, p) for row, p in enumerate(self.outcome.request.layout.parameters)}

    @cached_property
    def derived(self) -> dict[str, EstimateColumn]:
        """Numbers that follow from the parameters, by name; which there are depends on the model."""
        layout = self.outcome.request.layout
        first = len(layout.names)
        return {p.name: self._column(first + row, p) for row, p in enumerate(layout.shape.derived)}

    @property
    def shared_stderr(self) -> dict[str, Floats]:
        """Part of the stderr of each estimate and derived number that is due to errors that points share, by name.

        Nan where these are not all known; empty where none were said to be shared.
        """
        if self.outcome.shared is None:
            return {}
        return dict(zip(self.outcome.request.layout.all_names, self.outcome.shared.T, strict=True))

    def _column(self, row: int, parameter: Parameter) -> EstimateColumn:
        out, request = self.outcome, self.outcome.request
        link = request.layout.links[row]
        several = out.mixture.weight.shape[1] > 1 or bends(link)
        return EstimateColumn(
            out.value[:, row],
            out.stderr[:, row],
            compose_unit(parameter.unit, request.unit_x, request.unit_y),
            link,
            out.spread[:, row],
            out.dof,
            out.mixture.column(row, out.dof) if several else None,
        )

    @cached_property
    def warnings(self) -> list[tuple[FitWarning, ...]]:
        """The warnings of each fit, B tuples."""
        return judge_fits(self.outcome, self.x, self.started)

    @cached_property
    def trusted(self) -> Bools:
        """Whether each fit has no warning but advisory ones, (B,)."""
        return np.array([all(w.advisory for w in found) for found in self.warnings], dtype=bool)

    def result(self, row: int) -> FitResult:
        """Return one fit by itself."""
        used = np.flatnonzero(self.outcome.used(self.x, self.Y[row], row))
        outliers = np.flatnonzero(self.outcome.outlier[row])
        return FitResult(
            self.outcome.request,
            {name: column[row] for name, column in self.estimates.items()},
            {name: column[row] for name, column in self.derived.items()},
            self.warnings[row],
            tuple(outliers.tolist()),
            float(self.residual_stderr[row]),
            self.x[used],
            self.Y[row][used],
            used,
            self.outcome.covariance[row],
            self.outcome.deviation[row][used],
            self.x[outliers],
            self.Y[row][outliers],
            {name: float(column[row]) for name, column in self.shared_stderr.items()},
        )

    def to_dataset(self) -> xr.Dataset:
        """Return the estimates as a labelled array.

        Returns
        -------
        Dataset
            Dimensions are the axes not fitted along; the one dimension ``slice``, the axes being coordinates on it, if
            the slices fill less than a quarter of the grid; ``fit`` for fits of no scan. Variables: each estimate
            with ``_stderr``, ``_low68``, ``_high68``, ``_low95``, ``_high95`` (68 means 68.27 %); ``trusted``,
            ``warnings`` (codes), ``points`` and ``residual_stderr``. Where there is no slice: NaN, False, ``""``, 0.
        """
        from nightfold.scans.slicedata import estimates_dataset

        return estimates_dataset(self)

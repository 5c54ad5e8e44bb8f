"""One fit of one curve."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from nightfold.errors import FitError
from nightfold.fits.many import fit_table
from nightfold.fits.request import Times, as_points, check_shared, check_span, check_stderr, check_times
from nightfold.fits.result import FitResult


def fit_curve(
    x: ArrayLike,
    y: ArrayLike,
    model: object,
    *,
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
) -> FitResult:
    """Return a model fitted to points.

    Parameters
    ----------
    x, y : (n,) float arrays
        Points, in any order; repeats are further points; nan points are left out.
    model : str, Model or lmfit.Model
        A name (``lorentzian``; see ``nightfold models``) or a model of one's own.
    stderr : float or (n,) float array, optional
        Standard uncertainties of y, unit of y. Points where it is nan are left out when it is used.
    shared : (n, m) float array, optional
        Errors that points have in common: the change of y with each of m errors by one standard uncertainty of it,
        unit of y. Estimates are as without, their uncertainties allow for it; nan is not known and counts as nothing.
    absolute_stderr : bool
        Take stderr at face value: uncertainties are not scaled by the scatter found. Implies that they are
        used as weights.
    background : {"none", "flat", "sloped"}, optional
        Default: the model's own.
    fixed : mapping of name to value, optional
        Parameters held; they are reported with stderr 0 and left out of the covariance.
    start : mapping of name to value, optional
        Where to look: the start grid is held at these values, then everything is free. Parameters that the
        model is linear in are solved for exactly and need none.
    weights : {"auto", "equal", "given"}
        ``auto`` averages over how the scatter may depend on the signal, and on stderr if every point has one;
        ``equal`` counts every point the same; ``given`` weighs by 1 / stderr^2 (as `absolute_stderr` does).
    robust : bool
        Look for outliers and leave them out. With ``weights="equal"`` and False: ordinary least squares.
    unit_x, unit_y : str
        Units, from which those of the estimates are composed.
    started : (n,) array of times, optional
        When each point was taken (datetimes or seconds; NaT or nan where it is not known). Only the order counts: it
        tells whether conditions drifted during the scan.

    Returns
    -------
    FitResult

    Raises
    ------
    FitError
        When the request cannot be met: too few points, unknown parameter names, arrays that do not match.
    NotFound
        When no model has that name.

    Notes
    -----
    Least squares by variable projection from a global start grid, outliers left out, averaged over variance laws by
    their likelihood. ``stderr`` is the root mean square spread of that mixture, the interval at a level its quantiles
    in the coordinate of the fit (the logarithm of widths, times and rates). With one law these are the root of the
    scaled covariance ``SSE / (n - p) (J'WJ)^-1`` (unscaled for absolute stderr) and Student's t. The result does
    not depend on the order of the points. See docs/fits.md.
    """
    points, values = as_points("x", x, 1), as_points("y", y, 1)
    if len(points) != len(values):
        raise FitError(f"y: found {len(values)} values, wanted {len(points)} as for x")
    check_span("x", points)
    errors = check_stderr(stderr, values.shape)
    common = check_shared(shared, values.shape)
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
    table = fit_table(
        points, values[None], model, errors, options, True, common, check_times(started, len(points))
    )
    if not np.isfinite(table.outcome.low[0]):
        raise FitError(f"scan: {table.outcome.shortage(0)}")
    return table.result(0)

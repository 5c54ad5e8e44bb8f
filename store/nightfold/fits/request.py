"""What was asked of a fit, checked."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from difflib import get_close_matches
from math import isfinite
from typing import Any, Literal, cast, get_args

import numpy as np
from numpy.typing import ArrayLike

from nightfold.errors import FitError
from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.layout import BACKGROUND_PARAMETERS, Layout
from nightfold.fits.models import find_model
from nightfold.fits.models.shape import Background, LineShape

Weights = Literal["auto", "equal", "given"]
Times = ArrayLike | Sequence[datetime]


@dataclass(frozen=True)
class Request:
    """A fit as asked for: what to fit, what is held, how points are weighted.

    ``weighted`` tells whether the given stderr are used, ``absolute`` whether they set the scale too.
    """

    layout: Layout
    fixed: dict[str, float]
    start: dict[str, float]
    weights: Weights
    weighted: bool
    absolute: bool
    robust: bool
    unit_x: str
    unit_y: str

    @property
    def model(self) -> str:
        """Name of the model."""
        return self.layout.shape.name

    @property
    def elaborate(self) -> bool:
        """Whether more than least squares is asked for: outliers are looked for, or variance laws averaged."""
        return self.robust or (self.weights == "auto" and not self.weighted)

    @property
    def settings(self) -> dict[str, Any]:
        """What a kept fit must remember to be done again."""
        return {
            "weights": self.weights,
            "absolute_stderr": self.absolute,
            "robust": self.robust,
            "fixed": dict(self.fixed),
            "start": dict(self.start),
        }


def make_request(
    model: object,
    x: Floats,
    y: Floats,
    *,
    has_stderr: bool,
    absolute_stderr: bool,
    background: str | None,
    fixed: Mapping[str, float] | None,
    start: Mapping[str, float] | None,
    weights: str,
    robust: bool,
    unit_x: str,
    unit_y: str,
) -> Request:
    """Return a checked request.

    Raises
    ------
    FitError
        For an unknown background, weights or parameter name, a value out of range, or stderr asked for but
        not given.
    NotFound
        When no model has that name.
    """
    held = _numbers("fixed", fixed)
    began = _numbers("start", start)
    if isinstance(model, str):
        shape: LineShape = find_model(model)
    else:
        from nightfold.fits.model import adopt

        shape = adopt(model, x, y, held, began)
    style = shape.default_background if background is None else background
    if style not in get_args(Background):
        raise FitError(f"background: found {background!r}, wanted none, flat or sloped")
    chosen: Background = cast(Background, style)
    known = [p.name for p in (*shape.parameters, *BACKGROUND_PARAMETERS[chosen])]
    if len(set(known)) < len(known):
        raise FitError(f"{shape.name} has its own offset or slope; use background='none'")
    for what, values in (("fixed", held), ("start", began)):
        _check_names(what, values, known, shape.name, chosen)
        _check_positive(what, values, shape)
    form = shape.form(frozenset(held))
    return Request(
        Layout(form, chosen, frozenset(held)),
        held,
        began,
        *_check_weights(weights, has_stderr, absolute_stderr),
        bool(robust),
        unit_x,
        unit_y,
    )


def _check_weights(weights: str, has_stderr: bool, absolute: bool) -> tuple[Weights, bool, bool]:
    if weights not in get_args(Weights):
        raise FitError(f"weights: found {weights!r}, wanted auto, equal or given")
    if (weights == "given" or absolute) and not has_stderr:
        asked = "absolute_stderr=True" if absolute else "weights='given'"
        raise FitError(f"{asked}, but no stderr was given; pass stderr= or use weights='equal'")
    if absolute and weights == "equal":
        raise FitError("absolute_stderr=True contradicts weights='equal'; use weights='given'")
    return cast(Weights, weights), weights == "given" or absolute, absolute


def _numbers(what: str, values: Mapping[str, float] | None) -> dict[str, float]:
    if values is None:
        return {}
    if not isinstance(values, Mapping):
        raise FitError(f"{what}: found {values!r}, wanted a mapping from parameter name to value")
    numbers: dict[str, float] = {}
    for name, value in values.items():
        try:
            numbers[str(name)] = float(value)
        except (TypeError, ValueError):
            raise FitError(f"{what} {name}: found {value!r}, wanted a number") from None
        if not isfinite(numbers[name]):
            infinite_time = name == "decay_time" and numbers[name] == float("inf")
            if not infinite_time:
                raise FitError(f"{what} {name}: found {value!r}, wanted a finite number")
    return numbers


def _check_names(what: str, values: dict[str, float], known: list[str], model: str, background: str) -> None:
    for name in values:
        if name in known:
            continue
        if name in ("offset", "slope"):
            hint = f"the background is {background!r}"
        else:
            near = get_close_matches(name, known, n=1, cutoff=0.6)
            hint = f"did you mean {near[0]}?" if near else f"there are {', '.join(known)}"
        raise FitError(f"{what}: {model} has no parameter {name!r}; {hint}")


def _check_positive(what: str, values: dict[str, float], shape: LineShape) -> None:
    for name, value in values.items():
        if name in shape.positive and not value > 0:
            raise FitError(f"{what} {name}: found {value:g}, wanted a value greater than zero")


def as_points(what: str, values: ArrayLike, dimensions: int) -> Floats:
    """Return values as a float array of that many dimensions.

    Raises
    ------
    FitError
        When they are not numbers, of another shape, or infinite.
    """
    try:
        array = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise FitError(f"{what}: found values that are not numbers, wanted an array of numbers") from None
    if array.ndim != dimensions:
        raise FitError(f"{what}: found an array of shape {array.shape}, wanted {dimensions} dimension(s)")
    if np.isinf(array).any():
        where = tuple(int(i) for i in np.argwhere(np.isinf(array))[0])
        at = where[0] if len(where) == 1 else where
        raise FitError(f"{what}: found an infinite value at index {at}, wanted finite ones (nan is left out)")
    return array


def check_span(what: str, x: Floats) -> None:
    """Refuse points so far apart that their distance is beyond all numbers.

    Raises
    ------
    FitError
    """
    points = x[np.isfinite(x)]
    with np.errstate(over="ignore"):
        if len(points) and not np.isfinite(np.ptp(points)):
            raise FitError(
                f"{what}: found points from {points.min():.4g} to {points.max():.4g}, wanted a span that a number can "
                "hold (below 1.8e308); set the shots aside that are wrong"
            )


def check_stderr(stderr: ArrayLike | None, shape: tuple[int, ...]) -> Floats | None:
    """Return stderr as an array, or None; a single number or one per x serves every data set.

    Raises
    ------
    FitError
        When it is not positive or does not match the values.
    """
    if stderr is None:
        return None
    try:
        array = np.asarray(stderr, dtype=np.float64)
    except (TypeError, ValueError):
        raise FitError("stderr: found values that are not numbers, wanted an array of numbers") from None
    if array.ndim == 0:
        array = np.full(shape[-1:], float(array))
    if array.shape not in (shape, shape[-1:]):
        raise FitError(f"stderr: found shape {array.shape}, wanted {shape[-1:]} as for x")
    bad = ~(np.isnan(array) | ((array > 0) & np.isfinite(array)))
    if bad.any():
        where = tuple(int(i) for i in np.argwhere(bad)[0])
        at = where[0] if len(where) == 1 else where
        raise FitError(f"stderr: found {array[where]:g} at index {at}, wanted positive numbers")
    return array


def check_shared(shared: ArrayLike | None, shape: tuple[int, ...]) -> Floats | None:
    """Return the changes of points with the errors that they share as an array, or None.

    Raises
    ------
    FitError
        When they do not match the values, or are infinite.
    """
    if shared is None:
        return None
    try:
        array = np.asarray(shared, dtype=np.float64)
    except (TypeError, ValueError):
        raise FitError("shared: found values that are not numbers, wanted an array of numbers") from None
    if array.shape[:-1] not in (shape, shape[-1:]) or array.ndim < 2:
        raise FitError(f"shared: found shape {array.shape}, wanted ({shape[-1]}, m) for m shared errors")
    if np.isinf(array).any():
        raise FitError("shared: found an infinite value, wanted finite ones (nan: not known)")
    return array


def check_times(started: Times | None, count: int) -> Floats | None:
    """Return times as numbers of which the order counts, nan where one is not known; or None.

    Raises
    ------
    FitError
        When they are no times, or not one for each point.
    """
    if started is None:
        return None
    array = np.asarray(started)
    if array.dtype == object:
        import pandas as pd

        try:
            array = pd.DatetimeIndex(pd.to_datetime(array, utc=True)).tz_localize(None).to_numpy()
        except (TypeError, ValueError):
            raise FitError("started: found values that are not times, wanted datetimes or seconds") from None
    if array.dtype.kind not in "Mfiu":
        raise FitError(f"started: found values of type {array.dtype}, wanted datetimes or seconds")
    if array.shape != (count,):
        raise FitError(f"started: found shape {array.shape}, wanted {(count,)} as for x")
    known = ~np.isnat(array) if array.dtype.kind == "M" else np.isfinite(array)
    times = np.full(count, np.nan)
    if known.any():
        times[known] = np.unique(array[known], return_inverse=True)[1]
    return times

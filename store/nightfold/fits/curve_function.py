"""The fitted curve as a plain function of the reported parameters, and as an lmfit model."""

from __future__ import annotations

from inspect import Parameter as Argument
from inspect import Signature
from typing import TYPE_CHECKING, Any

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.layout import Layout

if TYPE_CHECKING:
    from nightfold.fits.result import FitResult


def evaluate(layout: Layout, x: Floats, values: dict[str, float]) -> Floats:
    """Return the curve, line and background, at x for reported parameter values."""
    shape = layout.shape
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        curve = shape.function(x, *(values[parameter.name] for parameter in shape.parameters))
        if layout.background != "none":
            curve = curve + values["offset"]
        if layout.background == "sloped":
            origin = values["center"] if layout.resonance else 0.0
            curve = curve + values["slope"] * (x - origin)
    return np.asarray(curve, dtype=np.float64)


def to_lmfit(result: FitResult) -> tuple[Any, Any]:
    """Return the curve as `lmfit.Model` and its estimates as `lmfit.Parameters`."""
    import lmfit

    layout = result.request.layout

    def curve(x: Floats, **values: float) -> Floats:
        return evaluate(layout, np.asarray(x, dtype=np.float64), values)

    keyword = Argument.POSITIONAL_OR_KEYWORD
    arguments = [Argument("x", keyword), *(Argument(name, keyword) for name in layout.names)]
    curve.__signature__ = Signature(arguments)  # type: ignore[attr-defined]
    curve.__name__ = result.model.replace("-", "_")
    model = lmfit.Model(curve, independent_vars=["x"])
    parameters = model.make_params()
    positive = {theta.name for theta in layout.shape.theta if theta.positive}
    longest = 1e6 * float(np.ptp(result.x))
    for name, estimate in result.estimates.items():
        value = estimate.value if np.isfinite(estimate.value) else longest
        parameters[name].set(value=value, vary=name not in layout.fixed)
        if name in positive and name not in layout.fixed:
            parameters[name].set(min=0.0)
        parameters[name].stderr = estimate.stderr
    return model, parameters

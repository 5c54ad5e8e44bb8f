"""The fitted curve as a plain function of the reported parameters, and as an lmfit model."""

from __future__ import annotations

from inspect import Parameter as Argument
from inspect import Signature
from typing import TYPE_CHECKING, Any

import numpy as np

from nightfold.fits.engine.arrays import Floats
from nightfold.fits.engine.layout import Layout
from nightfold.fits.models.shape import Link

if TYPE_CHECKING:
    from nightfold.fits.result import FitResult


LIMITS: dict[Link, tuple[float, float]] = {
    "log": (0.0, np.inf),
    "reciprocal": (0.0, np.inf),
    "inverse-root": (0.0, np.inf),
    "root": (0.0, np.inf),
    "not-negative": (0.0, np.inf),
    "share": (0.0, 1.0),
    "asymmetry": (-1.0, 1.0),
}
"""Within what limits a value lies, by its link."""


def evaluate(layout: Layout, x: Floats, values: dict[str, float]) -> Floats:
    """Return the curve, line and background, at x for reported parameter values, and derived ones where they help."""
    shape = layout.shape
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        curve = shape.curve(x, values)
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
    links = dict(zip(layout.all_names, layout.links, strict=True))
    longest = 1e6 * float(np.ptp(result.x))
    for name, estimate in result.estimates.items():
        value = estimate.value if np.isfinite(estimate.value) else longest
        parameters[name].set(value=value, vary=name not in layout.fixed)
        if name not in layout.fixed:
            low, high = LIMITS.get(links[name], (-np.inf, np.inf))
            parameters[name].set(min=max(low, 0.0) if name in layout.shape.positive else low, max=high)
        parameters[name].stderr = estimate.stderr
    return model, parameters

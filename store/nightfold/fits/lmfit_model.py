"""lmfit models in the form the engine fits."""

from __future__ import annotations

from typing import Any

import numpy as np

from nightfold.errors import FitError
from nightfold.fits.engine.arrays import Floats
from nightfold.fits.model import NumericShape, build_shape


def adopt_lmfit(
    model: Any, x: Floats, y: Floats, fixed: dict[str, float], start: dict[str, float]
) -> NumericShape:
    """Return the shape of an `lmfit.Model`.

    Its start comes from `start`, then the values set on the model, then its own guess, then its defaults.
    Parameters that are expressions of others (``fwhm`` of a peak, say) follow the others and are not
    reported; those set not to vary must be given in `fixed`.

    Raises
    ------
    FitError
        When it has several independent variables, or a parameter has no start.
    """
    if len(model.independent_vars) != 1:
        raise FitError(f"{model.name}: found independent variables {model.independent_vars}, wanted one")
    variable = model.independent_vars[0]
    parameters = model.make_params()
    names = tuple(n for n in model.param_names if parameters[n].expr is None)
    still = [n for n in names if not parameters[n].vary and n not in fixed]
    if still:
        value = parameters[still[0]].value
        raise FitError(f"{model.name}: {still[0]} is set not to vary; give fixed={{'{still[0]}': {value:g}}}")
    values = _hints(model, names) | start | fixed
    if any(n not in values for n in names):
        values = _guess(model, x, y, variable, names) | values
    values = {n: float(parameters[n].value) for n in names if _has_value(parameters[n])} | values
    limits = {n: (float(parameters[n].min), float(parameters[n].max)) for n in names}
    bounds = {n: pair for n, pair in limits.items() if np.isfinite(pair).any()}
    direct = not hasattr(model, "op") and all(parameters[n].expr is None for n in model.param_names)
    cut = len(model.prefix)

    def evaluate(x: Floats, at: dict[str, float]) -> Floats:
        if direct:
            found = model.func(**{variable: x}, **model.opts, **{n[cut:]: v for n, v in at.items()})
        else:
            for name, value in at.items():
                parameters[name].value = value
            found = model.eval(parameters, **{variable: x})
        return np.broadcast_to(np.asarray(found, dtype=np.float64), x.shape)

    return build_shape(str(model.name), names, None, evaluate, values, bounds, x, fixed)


def _hints(model: Any, names: tuple[str, ...]) -> dict[str, float]:
    """Return the values a person set on the model, of a composite one on its parts."""
    if hasattr(model, "op"):
        return _hints(model.left, names) | _hints(model.right, names)
    hints = {f"{model.prefix}{n}": hint.get("value") for n, hint in model.param_hints.items()}
    return {n: float(value) for n, value in hints.items() if value is not None and n in names}


def _has_value(parameter: Any) -> bool:
    return parameter.value is not None and bool(np.isfinite(parameter.value))


def _guess(model: Any, x: Floats, y: Floats, variable: str, names: tuple[str, ...]) -> dict[str, float]:
    try:
        guess = model.guess(y, **{variable: x})
    except NotImplementedError:
        return {}
    return {n: float(guess[n].value) for n in names if n in guess}

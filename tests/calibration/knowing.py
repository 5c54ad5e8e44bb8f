"""What a scan can tell at best: the Cramér-Rao bound at the truth under the scatter it really has."""

from __future__ import annotations

import numpy as np
from tests.calibration.shapes import Array, Spec, Values, height, names_of, rates_of, total

STEP = 1e-5
LEAST_FEATURE = 9.0
"""How far a feature must stand out of the scatter, in standard deviations, to count as there."""
LEAST_INSIDE = 4
"""Distinct x within one width that a line needs."""
LEAST_PERIODS = 1.2


def bounds(spec: Spec, background: str, x: Array, values: Values, sigma: Array) -> Values:
    """Return the least standard uncertainty of every reported name in its coordinate, (C,) each."""
    names = names_of(spec, background)
    columns = []
    for name in names:
        plus, minus, step = _moved(spec, name, values)
        change = total(spec, background, x, plus) - total(spec, background, x, minus)
        columns.append(change / step[:, None])
    jacobian = np.stack(columns, axis=2) / sigma[..., None]
    scale = np.sqrt(np.einsum("cnp,cnp->cp", jacobian, jacobian))
    scale = np.where(scale > 0, scale, 1e-300)
    jacobian = jacobian / scale[:, None]
    information = np.einsum("cnp,cnq->cpq", jacobian, jacobian)
    spread = np.sqrt(np.maximum(np.einsum("cpp->cp", np.linalg.pinv(information, 1e-13)), 0)) / scale
    spread = np.where(np.linalg.cond(information)[:, None] < 1e12, spread, np.inf)
    return {name: spread[:, row] for row, name in enumerate(names)}


def _moved(spec: Spec, name: str, values: Values) -> tuple[Values, Values, Array]:
    """Return the values a little up and a little down in the coordinate of one name, and how far apart."""
    value = np.asarray(values[name])
    link = spec.links_of(name)
    if link == "log":
        up, down, step = value * np.exp(STEP), value * np.exp(-STEP), np.full_like(value, 2 * STEP)
    elif link == "reciprocal":
        up, down, step = 1 / (1 / value + STEP), 1 / (1 / value - STEP), np.full_like(value, 2 * STEP)
    else:
        up, down, step = value + STEP, value - STEP, np.full_like(value, 2 * STEP)
    return {**values, name: up}, {**values, name: down}, step


def burden(spec: Spec, background: str, x: Array, values: Values, sigma: Array) -> Array:
    """Return how far a scan is from telling its numbers, (C,): up to 1 it is identifiable."""
    least = bounds(spec, background, x, values, sigma)
    parts = [least[name] / (limit * measure(spec, name, values)) for name, limit in spec.limits.items()]
    parts += [
        least[name] / (0.3 * height(spec, values)) for name in ("amplitude", "contrast") if name in least
    ]
    parts.append(LEAST_FEATURE / np.maximum(standing_out(spec, background, x, values, sigma), 1e-300))
    shown = sees_line(x, values) if spec.family == "line" else sees_wave(spec, x, values)
    return np.where(shown, np.max(parts, axis=0), np.inf)


def measure(spec: Spec, name: str, values: Values) -> Array | float:
    """Return what the uncertainty of a name is counted in."""
    if name == "center":
        return values["fwhm"]
    rates = rates_of(spec.units)
    return sum((values[rate] for rate in rates), np.zeros(1)) if name in rates and len(rates) > 1 else 1.0


def standing_out(spec: Spec, background: str, x: Array, values: Values, sigma: Array) -> Array:
    """Return how far the curve is from the nearest constant (or slope), in standard deviations, (C,)."""
    y = total(spec, background, x, values)
    flat = np.stack([np.ones_like(x), x - x.mean()][: 2 if background == "sloped" else 1], axis=1)
    weighed = flat[None] / sigma[..., None]
    z = y / sigma
    fit = np.linalg.pinv(weighed) @ z[..., None]
    rest = z - (weighed @ fit)[..., 0]
    return np.asarray(np.sqrt(np.einsum("cn,cn->c", rest, rest)))


def sees_line(x: Array, values: Values) -> Array:
    """Return whether enough distinct x lie within one width of the centre, (C,)."""
    distinct = np.unique(x)
    inside = np.abs(distinct[None] - values["center"][:, None]) <= values["fwhm"][:, None] / 2
    within = (values["center"] > distinct[0]) & (values["center"] < distinct[-1])
    return np.asarray((inside.sum(axis=1) >= LEAST_INSIDE) & within)


def sees_wave(spec: Spec, x: Array, values: Values) -> Array:
    """Return whether an oscillation shows enough periods; True for everything else."""
    if spec.family != "wave":
        return np.ones(len(next(iter(values.values()))), dtype=bool)
    return np.asarray(values["frequency"] * np.ptp(x) >= LEAST_PERIODS)

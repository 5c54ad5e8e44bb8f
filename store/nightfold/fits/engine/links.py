"""How a reported value follows from the coordinate in which its intervals are symmetric."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from nightfold.fits.engine.arrays import Floats

if TYPE_CHECKING:
    from nightfold.fits.models.shape import Link


def to_value(q: Floats, link: Link) -> Floats:
    """Return reported values for coordinates q; a reciprocal that is not positive is infinite."""
    if link == "linear":
        return q
    with np.errstate(over="ignore", divide="ignore"):
        if link == "log":
            return np.asarray(np.exp(q))
        if link == "share":
            return np.asarray(np.clip(q, 0.0, 1.0))
        if link == "asymmetry":
            return np.asarray(np.tanh(q / 2))
        positive = np.maximum(q, 0.0)
        if link == "reciprocal":
            return np.asarray(1.0 / positive)
        if link == "root":
            return np.asarray(np.sqrt(positive))
        if link == "inverse-root":
            return np.asarray(1.0 / np.sqrt(positive))
        return np.asarray(positive)


def steepness(value: Floats, link: Link) -> Floats:
    """Return the derivative of reported values for their coordinates."""
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        if link == "log":
            return value
        if link == "reciprocal":
            return np.asarray(-(value**2))
        if link == "root":
            return np.asarray(0.5 / value)
        if link == "inverse-root":
            return np.asarray(-0.5 * value**3)
        if link == "asymmetry":
            return np.asarray(0.5 * (1.0 - value**2))
    return np.ones_like(value)


def to_coordinate(value: Floats, link: Link) -> Floats:
    """Return the coordinates of reported values."""
    with np.errstate(divide="ignore", invalid="ignore"):
        if link == "log":
            return np.asarray(np.log(value))
        if link == "reciprocal":
            return np.asarray(1.0 / value)
        if link == "root":
            return np.asarray(value**2)
        if link == "inverse-root":
            return np.asarray(1.0 / value**2)
        if link == "asymmetry":
            return np.asarray(2.0 * np.arctanh(value))
    return value


def bends(link: Link) -> bool:
    """Return whether coordinates beyond what the value can be share one value, which does not tell them then."""
    return link in ("root", "share", "not-negative")


def falls(link: Link) -> bool:
    """Return whether the value falls as its coordinate rises."""
    return link in ("reciprocal", "inverse-root")

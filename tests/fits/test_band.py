"""The band of a curve agrees with lmfit's propagation, is honest where nothing is known, and covers."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import t

from nightfold import fit_curve
from nightfold.errors import FitError
from nightfold.fits.curve_function import evaluate
from nightfold.fits.engine.layout import Layout
from nightfold.fits.models import MODEL_NAMES, find_model

VALUES = {
    "center": 0.5, "fwhm": 0.3, "amplitude": 1.0, "lorentzian_share": 0.5, "asymmetry": 0.2, "offset": 0.3,
    "lifetime": 0.4, "one_body_rate": 2.0, "two_body_rate": 3.0, "three_body_rate": 3.0, "frequency": 4.0,
    "decay_time": 0.7, "phase": 0.5, "contrast": 0.8, "initial_size": 1.0, "velocity": 2.0,
    "characteristic_rate": 0.4, "saturation_point": 0.5,
}  # fmt: skip


def test_the_band_is_that_of_lmfit() -> None:
    x = np.repeat(np.linspace(60.0, 62.5, 21), 2)
    y = 1.2e5 - 6e4 / (1 + (2 * (x - 61.3) / 0.6) ** 2) + np.random.default_rng(1).normal(0, 3000, len(x))
    fit = fit_curve(x, y, "lorentzian", weights="equal", robust=False)
    at = np.array([60.0, 61.0, 61.3, 62.0])
    model, parameters = fit.to_lmfit()
    again = model.fit(y, parameters, x=x)
    low, high = fit.band(at, 0.6827)
    assert (high - low) / 2 == pytest.approx(again.eval_uncertainty(x=at, sigma=0.6827), rel=3e-3)
    assert (high + low) / 2 == pytest.approx(fit.predict(at))
    wider = fit.band(at, 0.95)
    assert np.all(wider[1] - wider[0] > 1.9 * (high - low))


@pytest.mark.parametrize("model", MODEL_NAMES)
def test_the_band_follows_from_the_covariance(model: str) -> None:
    """Half widths against g^T C g, with the derivatives and the covariance of the parameters themselves."""
    shape = find_model(model)
    layout = Layout(shape, shape.default_background, frozenset())
    x = np.linspace(0.05, 1.0, 60)
    y = evaluate(layout, x, {name: VALUES[name] for name in layout.names})
    y = y + 2e-3 * np.random.default_rng(6).normal(size=60)
    fit = fit_curve(x, y, model, weights="equal", robust=False)
    at = np.linspace(0.05, 1.0, 9)
    values = {name: estimate.value for name, estimate in fit.estimates.items()}
    slopes = []
    for name in fit.free_names:
        step = 1e-3 * fit.estimates[name].stderr
        ends = [evaluate(layout, at, {**values, name: values[name] + sign * step}) for sign in (-1, 1)]
        slopes.append((ends[1] - ends[0]) / (2 * step))
    variance = np.einsum("in,ij,jn->n", slopes, fit.covariance_matrix, slopes)
    low, high = fit.band(at, 0.95)
    half = (high - low) / 2
    assert half == pytest.approx(t.ppf(0.975, fit.dof) * np.sqrt(variance), rel=0.01, abs=1e-9)


def test_a_straight_line_has_the_textbook_band() -> None:
    """Student's t times s sqrt(1/n + (x - mean)^2 / Sxx)."""
    import lmfit

    x = np.arange(8.0)
    y = 2 * x + np.array([0.1, -0.2, 0.05, 0.3, -0.1, -0.15, 0.2, -0.05])
    fit = fit_curve(x, y, lmfit.models.LinearModel(), weights="equal", robust=False)
    at = np.array([0.0, 3.5, 12.0])
    slope, offset = np.polyfit(x, y, 1)
    s = np.sqrt(np.sum((y - slope * x - offset) ** 2) / 6)
    half = t.ppf(0.975, 6) * s * np.sqrt(1 / 8 + (at - 3.5) ** 2 / np.sum((x - 3.5) ** 2))
    low, high = fit.band(at, 0.95)
    assert (high - low) / 2 == pytest.approx(half, rel=1e-6)


def test_the_band_covers() -> None:
    rng, x, inside = np.random.default_rng(4), np.linspace(0.0, 3.0, 16), 0
    for _ in range(200):
        fit = fit_curve(x, np.exp(-x) + rng.normal(0, 0.03, 16), "exponential", weights="equal", robust=False)
        low, high = fit.band([0.7])
        inside += bool(low[0] <= np.exp(-0.7) <= high[0])
    assert inside / 200 == pytest.approx(0.6827, abs=0.1)


def test_a_time_without_end_has_a_band_too() -> None:
    x = np.linspace(0, 10, 30)
    y = 3 * np.cos(2 * np.pi * 0.4 * x) + np.random.default_rng(1).normal(0, 0.4, 30)
    fit = fit_curve(x, y, "damped-oscillation", weights="equal", robust=False)
    assert np.isinf(fit.estimates["decay_time"].value)
    low, high = fit.band(x)
    assert np.all((high > low) & (high - low < 2))


def test_nothing_free_has_no_width_and_nothing_known_no_band() -> None:
    x = np.linspace(-1, 1, 9)
    y = 1 / (1 + x**2) + 0.01 * np.cos(40 * x)
    held = {"center": 0.0, "fwhm": 2.0, "amplitude": 1.0, "offset": 0.0}
    fixed = fit_curve(x, y, "lorentzian", fixed=held)
    assert np.array_equal(*fixed.band([0.0]))
    tight = fit_curve(x[:4], y[:4], "lorentzian", weights="equal", robust=False)
    assert np.all(np.isnan(tight.band(x)))
    with pytest.raises(FitError, match="level"):
        fixed.band([0.0], 68)

"""Where models put the centre of a skewed loss dip, without scatter; the whole table is tests/calibration/dips.py."""

from __future__ import annotations

import numpy as np
import pytest

from nightfold.fits.curve import fit_curve

from ...calibration.dips import Dip, loss_coefficient, make_dip


def center_of(dip: Dip, model: str) -> float:
    """Return the fitted centre less the deepest point, in widths of the dip."""
    x = dip.deepest + dip.width * np.linspace(-3.5, 3.5, 31)
    result = fit_curve(x, np.interp(x, dip.b, dip.y), model, weights="equal", robust=False)
    return (result.estimates["center"].value - dip.deepest) / dip.width


def test_a_cold_dip_has_the_centre_of_all_models() -> None:
    dip = make_dip(0.0, 0.6)
    assert dip.deepest == pytest.approx(0.0, abs=1e-6)
    for model in ("lorentzian", "gaussian", "voigt", "asymmetric-lorentzian"):
        assert abs(center_of(dip, model)) < 0.005


def test_a_thermal_tail_draws_symmetric_models_away() -> None:
    dip = make_dip(1.0, 0.6)
    for model in ("lorentzian", "gaussian", "voigt"):
        assert 0.1 < center_of(dip, model) < 0.18
    assert abs(center_of(dip, "asymmetric-lorentzian")) < 0.04


def test_a_saturated_dip_draws_all_models_away() -> None:
    dip = make_dip(1.0, 0.95)
    for model in ("lorentzian", "gaussian", "voigt", "asymmetric-lorentzian"):
        assert center_of(dip, model) > 0.06


def test_the_loss_is_the_mean_over_energies() -> None:
    b = np.array([-3.0, 0.0, 2.0, 9.0])
    cold = loss_coefficient(b, 1e-4)
    assert cold == pytest.approx(loss_coefficient(b, 0.0), rel=1e-2, abs=1e-3)
    hot = loss_coefficient(np.linspace(-30, 100, 400), 10.0)
    far = np.linspace(-30, 100, 400)
    wanted = np.sqrt(np.maximum(far, 0)) * np.exp(-np.maximum(far, 0) / 10)
    assert hot[far > 15] == pytest.approx((wanted / wanted.max())[far > 15], abs=0.06)

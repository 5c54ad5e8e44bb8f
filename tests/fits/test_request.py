from __future__ import annotations

import re
from typing import Any

import numpy as np
import pytest

from nightfold import Store
from nightfold.errors import FitError
from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many

from .examples import EXAMPLES

X = EXAMPLES["lorentzian"].x
Y = EXAMPLES["lorentzian"].noisy(1, 0.05)
INDEX = np.arange(31)
HOLED = np.where(INDEX < 28, np.nan, Y)


@pytest.mark.parametrize(
    ("x", "y", "message"),
    [
        (X[:3], Y[:3], "scan: 3 points, but lorentzian has 4 free parameters; fix one or add shots"),
        (X[:1], Y[:1], "scan: 1 point, but lorentzian has 4 free parameters; fix one or add shots"),
        (X, HOLED, "scan: 3 points, but lorentzian has 4 free parameters; fix one or add shots"),
        ([], [], "scan: 0 points, but lorentzian has 4 free parameters; fix one or add shots"),
        (
            np.repeat([1.0, 2.0, 3.0], 5),
            np.arange(15.0),
            "scan: 3 distinct values of x, but lorentzian has 4 free parameters; fix one or add shots",
        ),
        (X, Y[:-1], "y: found 30 values, wanted 31 as for x"),
        (X[None], Y, "x: found an array of shape (1, 31), wanted 1 dimension(s)"),
        (X, ["a"] * 31, "y: found values that are not numbers, wanted an array of numbers"),
        (np.where(INDEX == 4, np.inf, X), Y, "x: found an infinite value at index 4, wanted finite ones"),
        (X, np.where(INDEX == 2, -np.inf, Y), "y: found an infinite value at index 2, wanted finite ones"),
    ],
)
def test_points_that_cannot_be_fitted(x: Any, y: Any, message: str) -> None:
    with pytest.raises(FitError, match=re.escape(message)):
        fit_curve(x, y, "lorentzian")


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"background": "tilted"}, "background: found 'tilted', wanted none, flat or sloped"),
        ({"weights": "best"}, "weights: found 'best', wanted auto, equal or given"),
        ({"weights": "given"}, "weights='given', but no stderr was given"),
        ({"absolute_stderr": True}, "absolute_stderr=True, but no stderr was given"),
        (
            {"absolute_stderr": True, "stderr": 0.1, "weights": "equal"},
            "absolute_stderr=True contradicts weights='equal'",
        ),
        ({"stderr": [0.1, 0.2]}, "stderr: found shape (2,), wanted (31,) as for x"),
        ({"stderr": np.where(INDEX == 5, 0.0, 0.1)}, "stderr: found 0 at index 5, wanted positive numbers"),
        ({"stderr": np.where(INDEX == 5, -1.0, 0.1)}, "stderr: found -1 at index 5, wanted positive numbers"),
        ({"fixed": {"centre": 3.0}}, "fixed: lorentzian has no parameter 'centre'; did you mean center?"),
        ({"start": {"tau": 3.0}}, "start: lorentzian has no parameter 'tau'; there are center, fwhm"),
        ({"fixed": {"slope": 0.0}}, "fixed: lorentzian has no parameter 'slope'; the background is 'flat'"),
        ({"fixed": {"fwhm": 0.0}}, "fixed fwhm: found 0, wanted a value greater than zero"),
        ({"start": {"fwhm": -1.0}}, "start fwhm: found -1, wanted a value greater than zero"),
        ({"fixed": {"center": np.nan}}, "fixed center: found nan, wanted a finite number"),
        ({"fixed": {"center": "33 G"}}, "fixed center: found '33 G', wanted a number"),
        ({"fixed": ["center"]}, "fixed: found ['center'], wanted a mapping from parameter name to value"),
    ],
)
def test_requests_that_cannot_be_met(options: dict[str, Any], message: str) -> None:
    with pytest.raises(FitError, match=re.escape(message)):
        fit_curve(X, Y, "lorentzian", **options)


def test_model_must_be_a_model() -> None:
    with pytest.raises(
        FitError, match=re.escape("model: found 3, wanted the name of a model, a Model or an")
    ):
        fit_curve(X, Y, 3)


def test_fixing_one_makes_a_short_scan_possible() -> None:
    result = fit_curve(X[12:16], Y[12:16], "lorentzian", fixed={"offset": 1.1})
    assert result.dof == 1


def test_as_many_points_as_parameters_is_a_result_without_uncertainty() -> None:
    rows = [4, 13, 15, 18]
    result = fit_curve(X[rows], Y[rows], "lorentzian")
    assert result.dof == 0
    assert result.estimates["center"].stderr == np.inf
    assert result.estimates["center"].interval(0.5) == (-np.inf, np.inf)
    assert "too-few-points" in [warning.code for warning in result.warnings]
    absolute = fit_curve(X[rows], Y[rows], "lorentzian", stderr=0.05, absolute_stderr=True)
    assert np.isfinite(absolute.estimates["center"].stderr)


def test_points_farther_apart_than_a_number_can_tell() -> None:
    x = [-1e308, 0.0, 1.0, 2.0, 3.0, 1e308]
    said = "x: found points from -1e[+]308 to 1e[+]308, wanted a span that a number can hold"
    with pytest.raises(FitError, match=said):
        fit_curve(x, [1.0, 2.0, 3.0, 2.0, 1.0, 1.0], "lorentzian", background="none")
    with pytest.raises(FitError, match=said):
        fit_many(x, [[1.0, 2.0, 3.0, 2.0, 1.0, 1.0]], "lorentzian", background="none")


def test_a_scan_with_such_points_names_its_axis(store: Store) -> None:
    store.take(
        {
            "uid": f"far-{k}", "machine": "heron", "sequence": "hold", "scan": "far", "swept": ["hold"],
            "started": f"2026-10-05T20:{k:02d}:00+00:00", "parameters": {"hold": value}, "observables": {"n": 1.0 + k},
        }
        for k, value in enumerate([-1e308, 0.0, 1.0, 2.0, 3.0, 1e308])
    )  # fmt: skip
    with pytest.raises(FitError, match=r"scan far#1: hold: found points from -1e[+]308 to 1e[+]308"):
        store.fit("far", "exponential", observable="n")

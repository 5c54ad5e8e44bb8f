from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.fits.curve import fit_curve
from nightfold.fits.many import fit_many
from nightfold.fits.result import FitResult

from .examples import EXAMPLES, FIELD, SHORT, TIME, Example

Array = NDArray[np.float64]


def codes(result: FitResult) -> list[str]:
    return [warning.code for warning in result.warnings]


def message(result: FitResult, code: str) -> str:
    return next(warning.message for warning in result.warnings if warning.code == code)


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_good_scans_are_trusted(example: Example) -> None:
    Y = example.noisy(31, 0.06, (100,))
    table = fit_many(example.x, Y, example.model, background=example.background, full=True)
    assert table.trusted.mean() >= 0.95


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_scatter_alone_is_not_trusted(example: Example) -> None:
    noise = np.random.default_rng(32).normal(size=(100, len(example.x)))
    table = fit_many(example.x, 5.0 + noise, example.model, background=example.background, full=True)
    assert table.trusted.mean() <= 0.03
    assert np.mean([any(w.code == "no-feature" for w in found) for found in table.warnings]) >= 0.93


def test_one_wild_shot_is_no_line() -> None:
    y = 1.0 + 0.02 * np.random.default_rng(33).normal(size=31)
    y[12] = 9.0
    assert "no-feature" in codes(fit_curve(FIELD, y, "lorentzian"))


def test_no_feature_says_how_often_chance_does_as_well() -> None:
    y = 1.0 + 0.1 * np.random.default_rng(35).normal(size=31)
    found = fit_curve(FIELD, y, "lorentzian")
    assert not found.trusted
    assert "% of random shuffles of the shots look as much like the model (lorentzian)" in message(
        found, "no-feature"
    )


def test_constant_values_have_no_feature() -> None:
    result = fit_curve(FIELD, np.full(31, 7.0), "lorentzian")
    assert message(result, "no-feature") == (
        "all 31 values are the same; check the observable, then take the scan again"
    )
    assert codes(result) == ["no-feature"]
    assert codes(fit_curve(TIME, np.full(len(TIME), 7.0), "exponential")) == ["no-feature"]
    assert result.estimates["offset"].value == pytest.approx(7.0)
    assert not fit_curve(FIELD, np.zeros(31), "exponential").trusted


def test_line_outside_the_scan() -> None:
    y = 1.0 - 0.8 / (1 + (2 * (FIELD - 36.9) / 2.5) ** 2)
    y += 0.01 * np.random.default_rng(3).normal(size=31)
    result = fit_curve(FIELD, y, "lorentzian", unit_x="G")
    text = message(result, "center-outside")
    assert text.startswith(("the center, 36.", "the center, 37."))
    assert text.endswith("lies outside the scan (30 to 36 G); extend the scan above 36 G")
    mirrored = fit_curve(66 - FIELD, y, "lorentzian", unit_x="G")
    assert "extend the scan below 30 G" in message(mirrored, "center-outside")


def test_less_than_a_period() -> None:
    y = 1.0 + np.cos(2 * np.pi * 0.3 * SHORT + 0.4)
    y += 0.01 * np.random.default_rng(3).normal(size=len(SHORT))
    result = fit_curve(SHORT, y, "damped-oscillation", unit_x="s")
    assert "periods, too few to tell them from a drift; extend it to" in message(result, "under-one-period")


def test_a_drift_is_no_oscillation_and_gets_no_figures() -> None:
    y = 3.0 * SHORT + 0.01 * np.random.default_rng(3).normal(size=len(SHORT))
    result = fit_curve(SHORT, y, "damped-oscillation", unit_x="s")
    text = message(result, "under-one-period")
    assert text == (
        "the scan shows no whole period, only what could be a drift; extend it until it shows several,"
        " or fit another model"
    )
    assert "frequency" not in " ".join(w.message for w in result.warnings if w.code == "at-bound")


@pytest.mark.parametrize(("sign", "said"), [(1, "rise instead of fall"), (-1, "fall instead of rise")])
@pytest.mark.parametrize("model", ["exponential", "two-body"])
def test_data_that_go_the_other_way(model: str, sign: int, said: str) -> None:
    if model == "two-body" and sign < 0:
        pytest.skip("an amount is positive")
    y = sign * (np.exp(TIME / TIME.max()) + 0.02 * np.random.default_rng(6).normal(size=len(TIME)))
    result = fit_curve(TIME, y, model, unit_x="s")
    assert f"the data {said}; fit another model or with a background" in message(result, "at-bound")
    assert "longer" not in " ".join(warning.message for warning in result.warnings)


def test_an_edge_carries_its_unit() -> None:
    y = 5.0 + 0.1 * np.random.default_rng(8).normal(size=len(TIME))
    text = message(fit_curve(TIME, y, "exponential", unit_x="s"), "at-bound")
    assert " s); scan longer, or fix it" in text


def test_lifetime_much_longer_than_the_scan() -> None:
    y = np.exp(-TIME / 900.0) + 0.05 * np.random.default_rng(6).normal(size=len(TIME))
    result = fit_curve(TIME, y, "exponential")
    assert not result.trusted
    assert "scan longer, with shots both early and late, or fix it" in message(result, "poorly-determined")


def test_fixed_parameters_are_not_judged() -> None:
    y = np.exp(-TIME / 12.0) + 0.01 * np.random.default_rng(6).normal(size=len(TIME))
    assert fit_curve(TIME, y, "exponential", fixed={"lifetime": 12.0}).trusted


def test_warnings_are_advice_of_one_kind_each() -> None:
    y = 1.0 + 0.1 * np.random.default_rng(35).normal(size=31)
    result = fit_curve(FIELD, y, "gaussian", background="sloped")
    assert len(set(codes(result))) == len(codes(result))
    assert not any(warning.advisory for warning in result.warnings)


def test_warnings_do_not_depend_on_units() -> None:
    example = EXAMPLES["lorentzian"]
    for seed in range(8):
        y = example.noisy(seed, 0.3)
        plain = fit_curve(example.x, y, "lorentzian")
        other = fit_curve(example.x * 1e-4, y * 1e5, "lorentzian")
        assert codes(plain) == codes(other)

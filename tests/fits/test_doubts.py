"""Each warning beyond the estimates themselves: a scan that must raise it, and one that must not."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from nightfold.errors import FitError
from nightfold.fits.curve import fit_curve
from nightfold.fits.engine.warning import FitWarning
from nightfold.fits.many import fit_many
from nightfold.fits.result import FitResult

from .examples import EXAMPLES, Example
from .strd import read

Array = NDArray[np.float64]
ROOT = Path(__file__).parents[2]
FIELD = np.linspace(0.0, 10.0, 41)
LINES = ("lorentzian", "gaussian", "voigt", "rabi-line", "asymmetric-lorentzian")


def rng(seed: int) -> np.random.Generator:
    return np.random.default_rng(seed)


def lorentzian(x: Array, center: float, fwhm: float) -> Array:
    return np.asarray(1 / (1 + (2 * (x - center) / fwhm) ** 2))


def warning(result: FitResult, code: str) -> FitWarning:
    return next(one for one in result.warnings if one.code == code)


def codes(result: FitResult) -> list[str]:
    return [one.code for one in result.warnings]


# --- points ------------------------------------------------------------------------------------------------


def test_a_line_between_the_points() -> None:
    y = lorentzian(FIELD, 4.1, 0.3) + 0.01 * rng(1).normal(size=41)
    found = fit_curve(FIELD, y, "lorentzian", unit_x="G")
    text = warning(found, "too-few-points").message
    assert text == (
        "only 1 value of x lies within the width of the line (3.9499 to 4.24758 G); take points every 0.06 G there"
    )
    assert not found.trusted


def test_three_points_on_a_line_are_enough() -> None:
    y = lorentzian(FIELD, 4.0, 0.8) + 0.01 * rng(1).normal(size=41)
    assert fit_curve(FIELD, y, "lorentzian").trusted


def test_a_decay_that_is_over_before_the_first_point() -> None:
    x = np.linspace(3.0, 9.0, 41)
    y = np.exp(-x / 2) + 2e-4 * rng(1).normal(size=41)
    text = warning(fit_curve(x, y, "exponential", unit_x="s"), "too-few-points").message
    assert (
        text
        == "the first point, at 3 s, comes after 1.5 times the time found, 1.999 s; begin the scan below 2 s"
    )
    earlier = np.linspace(1.5, 9.0, 41)
    good = fit_curve(earlier, np.exp(-earlier / 2) + 2e-4 * rng(1).normal(size=41), "exponential")
    assert "too-few-points" not in codes(good)


def test_aliases_of_evenly_spaced_points_are_named() -> None:
    x = np.arange(40) * 0.1
    y = np.cos(2 * np.pi * 4.6 * x) + 0.05 * rng(1).normal(size=40)
    found = fit_curve(x, y, "cosine", unit_x="s")
    said = warning(found, "aliases")
    assert said.advisory
    assert found.trusted
    others = [float(f) for f in re.findall(r"([\d.]+)/s", said.message)]
    assert others == pytest.approx([5.4, 14.6, 15.4], abs=0.01)
    for f in others:
        again = fit_curve(x, y, "cosine", start={"frequency": f}, weights="equal", robust=False)
        assert again.estimates["frequency"].value == pytest.approx(f, abs=0.01)
        assert again.residual_stderr == pytest.approx(0.05, rel=0.25)


def test_a_frequency_above_what_is_sampled_rests_on_the_start() -> None:
    x = np.arange(40) * 0.1
    y = np.cos(2 * np.pi * 7.3 * x) + 0.05 * rng(1).normal(size=40)
    told = warning(fit_curve(x, y, "cosine", start={"frequency": 7.3}, unit_x="s"), "too-few-points")
    assert told.advisory
    assert "1.4 points a period, evenly spaced: frequencies of 2.7" in told.message


def test_uneven_points_have_no_aliases() -> None:
    x = np.sort(rng(2).uniform(0, 4, 40))
    y = np.cos(2 * np.pi * 4.6 * x) + 0.05 * rng(1).normal(size=40)
    assert not {"aliases", "too-few-points"} & set(codes(fit_curve(x, y, "cosine")))


# --- minima ------------------------------------------------------------------------------------------------


def test_two_dips_of_one_size_are_ambiguous() -> None:
    x = np.linspace(0, 10, 61)
    noise = 0.15 * rng(4).normal(size=61)
    y = 1 - lorentzian(x, 2.5, 0.7) - lorentzian(x, 7.5, 0.7) + (noise + noise[::-1]) / 2
    found = fit_curve(x, y, "lorentzian", unit_x="G", robust=False)
    text = warning(found, "ambiguous").message
    assert re.search(r"a center of [27]\.\d+ G or [27]\.\d+ G", text)
    assert "take more shots around" in text
    smaller = 1 - lorentzian(x, 2.5, 0.7) - 0.3 * lorentzian(x, 7.5, 0.7) + 0.05 * rng(4).normal(size=61)
    assert "ambiguous" not in codes(fit_curve(x, smaller, "lorentzian", robust=False))


def test_a_height_that_another_number_makes_up_for() -> None:
    x = np.linspace(0, 1, 31)
    y = 1 - 0.2 * x + 0.01 * rng(1).normal(size=31)
    found = fit_curve(x, y, "one-two-body", background="flat")
    assert "other numbers make up for it" in warning(found, "poorly-determined").message


# --- shapes ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("background", ["none", "flat", "sloped"])
@pytest.mark.parametrize("model", LINES)
@pytest.mark.parametrize("name", ["Eckerle4", "Gauss1", "Gauss2", "Gauss3"])
def test_measured_peaks_are_never_trusted_and_wrong(name: str, model: str, background: str) -> None:
    peak = read(name)
    found = fit_curve(peak.x, peak.y, model, background=background)
    assert not found.trusted
    if name != "Eckerle4":  # two lines on a decay
        assert not warning(found, "poor-fit").advisory if "poor-fit" in codes(found) else True


@pytest.mark.parametrize("weights", ["auto", "equal"])
def test_a_two_body_decay_is_no_exponential(weights: str) -> None:
    x = np.linspace(0, 10, 41)
    y = 1 / (1 + 0.8 * x) + 0.01 * rng(5).normal(size=41)
    said = warning(fit_curve(x, y, "exponential", weights=weights, robust=False), "poor-fit")
    assert not said.advisory
    assert "the residuals follow a pattern along x (chance does so in 0.1 % of scans)" in said.message
    assert "fit another model or background" in said.message
    assert "poor-fit" not in codes(fit_curve(x, y, "two-body", weights=weights, robust=False))


def test_a_lopsided_line_is_no_lorentzian() -> None:
    z = (FIELD - 4) / 0.6
    y = np.where(z > 0, np.exp(-z / 2.5), np.exp(-(z**2))) + 0.02 * rng(6).normal(size=41)
    assert "poor-fit" in codes(fit_curve(FIELD, y, "lorentzian"))


def test_an_oscillation_with_overtones_is_no_sine() -> None:
    x = np.linspace(0, 5, 60)
    phase = 2 * np.pi * 1.1 * x
    y = np.cos(phase) + 0.4 * np.cos(2 * phase + 1) + 0.1 * rng(7).normal(size=60)
    assert "poor-fit" in codes(fit_curve(x, y, "cosine"))


def test_means_of_repeats_off_the_curve() -> None:
    x = np.repeat(np.arange(8.0), 5)
    steps = np.tile([0.05, -0.05], 4)
    y = np.exp(-x / 4) + np.repeat(steps, 5) + 0.02 * rng(8).normal(size=40)
    text = warning(fit_curve(x, y, "exponential", weights="equal", robust=False), "poor-fit").message
    assert text.startswith("the means of repeats lie off the curve by more than the repeats scatter")
    same = np.exp(-x / 4) + 0.05 * rng(9).normal(size=40)
    assert "poor-fit" not in codes(fit_curve(x, same, "exponential", weights="equal", robust=False))


def test_a_pattern_that_moves_nothing_is_advice() -> None:
    """A wiggle far from a line that is known well."""
    x = np.linspace(-10, 10, 201)
    y = lorentzian(x, 0.0, 1.0) + 0.02 * rng(9).normal(size=201)
    assert fit_curve(x, y, "lorentzian").trusted


# --- drifts ------------------------------------------------------------------------------------------------


def drifting(order: NDArray[np.intp], seed: int) -> Array:
    """Return a line in points taken in that order while the atom number wanders."""
    y = 1 - 0.6 * lorentzian(FIELD, 5.0, 1.5) + 0.01 * rng(seed).normal(size=41)
    y[order] += 0.06 * np.sin(np.linspace(0, 2.5 * np.pi, 41))
    return np.asarray(y)


def test_a_drift_in_a_scan_taken_in_order() -> None:
    order = np.arange(41)
    found = fit_curve(FIELD, drifting(order, 1), "lorentzian", started=order.astype(float))
    said = warning(found, "drift-within-scan")
    assert not said.advisory
    assert said.message.endswith("shuffle the order of the points and take the scan again")
    assert not found.trusted


def test_a_drift_in_a_shuffled_scan_is_advice() -> None:
    order = rng(3).permutation(41)
    started = np.empty(41)
    started[order] = np.arange(41)
    found = fit_curve(FIELD, drifting(order, 1), "lorentzian", started=started)
    assert warning(found, "drift-within-scan").advisory
    assert found.trusted
    assert "drift-within-scan" not in codes(fit_curve(FIELD, drifting(order, 1), "lorentzian"))


def test_times_of_any_kind() -> None:
    order = rng(3).permutation(41)
    y = drifting(order, 1)
    turn = np.argsort(order)
    first = datetime(2026, 3, 4, 22, 0, tzinfo=UTC)
    clock = [first + timedelta(seconds=30 * int(i)) for i in turn]
    seconds = fit_curve(FIELD, y, "lorentzian", started=turn * 30.0)
    for started in (clock, np.array(turn * 30, dtype="datetime64[s]"), turn):
        assert fit_curve(FIELD, y, "lorentzian", started=started).warnings == seconds.warnings
    some = np.array(turn * 30, dtype="datetime64[s]")
    some[::15] = np.datetime64("NaT")
    assert "drift-within-scan" in codes(fit_curve(FIELD, y, "lorentzian", started=some))
    few = np.where(np.arange(41) % 2, np.nan, turn)
    assert "drift-within-scan" not in codes(fit_curve(FIELD, y, "lorentzian", started=few))


def test_times_that_are_none_are_refused() -> None:
    y = drifting(np.arange(41), 1)
    with pytest.raises(FitError, match=r"started: found shape \(3,\), wanted \(41,\) as for x"):
        fit_curve(FIELD, y, "lorentzian", started=[1.0, 2.0, 3.0])
    with pytest.raises(FitError, match=r"started: found values .* wanted datetimes or seconds"):
        fit_curve(FIELD, y, "lorentzian", started=["soon"] * 41)


# --- stated uncertainties ----------------------------------------------------------------------------------


@pytest.mark.parametrize(("stated", "advisory"), [(0.02, False), (0.15, True)])
def test_stated_uncertainties_that_the_points_contradict(stated: float, advisory: bool) -> None:
    y = lorentzian(FIELD, 4.0, 1.5) + 0.05 * rng(1).normal(size=41)
    found = fit_curve(FIELD, y, "lorentzian", stderr=stated, absolute_stderr=True)
    said = warning(found, "stated-stderr")
    assert said.advisory is advisory
    assert found.trusted is advisory
    assert "do not take these at face value" in said.message
    right = fit_curve(FIELD, y, "lorentzian", stderr=0.05, absolute_stderr=True)
    assert "stated-stderr" not in codes(right)


# --- all of them -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("example", EXAMPLES.values(), ids=lambda e: e.model)
def test_false_alarms_are_rare(example: Example) -> None:
    """Counts of 150 good scans: below 3 % for every model, which 5 % would pass by once in 30."""
    Y = example.noisy(41, 0.06, (150,))
    started = rng(1).permutation(len(example.x)).astype(float)
    table = fit_many(example.x, Y, example.model, background=example.background, full=True, started=started)
    assert np.count_nonzero(~table.trusted) <= 7


def test_warnings_are_the_same_alone_and_together() -> None:
    example = EXAMPLES["lorentzian"]
    Y = example.noisy(43, 0.4, (12,))
    started = np.arange(len(example.x))
    table = fit_many(example.x, Y, "lorentzian", full=True, started=started)
    for row, y in enumerate(Y):
        assert table.warnings[row] == fit_curve(example.x, y, "lorentzian", started=started).warnings


def test_every_code_is_documented() -> None:
    engine = ROOT / "store" / "nightfold" / "fits"
    text = "\n".join(path.read_text() for path in engine.rglob("*.py"))
    given = set(re.findall(r"FitWarning\(\s*\"([a-z-]+)\"", text)) | {"too-few-points", "aliases"}
    table = (ROOT / "docs" / "fits.md").read_text().split("## Warnings")[1].split("\n## ")[0]
    assert given == set(re.findall(r"^\| `([a-z-]+)` \|", table, re.MULTILINE))

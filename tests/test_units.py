"""Units: known ones, conversions, and what a standard uncertainty may go through."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold.errors import UnitError
from nightfold.units import conversion, convert, convertible, parse_unit


@pytest.mark.parametrize(
    ("value", "unit", "to", "wanted"),
    [
        (120, "ms", "s", 0.12),
        (0.1, "s", "ms", 100.0),
        (33.612, "G", "T", 33.612e-4),
        (1, "T", "G", 1e4),
        (1, "gauss", "mT", 0.1),
        (412, "nK", "µK", 0.412),
        (5, "MHz", "kHz", 5000.0),
        (20, "degC", "K", 293.15),
        (0, "dBm", "mW", 1.0),
        (3, "1/s", "Hz", 3.0),
        (180, "deg", "rad", math.pi),
        (1, "turn", "deg", 360.0),
        (7, "atoms", "", 7.0),
        (7, "OD", "", 7.0),
        (50, "percent", "", 0.5),
        (2, "m s^-1", "mm/s", 2000.0),
    ],
)
def test_conversions(value: float, unit: str, to: str, wanted: float) -> None:
    """The kilogram of SI and the correspondence 1 G = 1e-4 T: SI Brochure, 9th edition, table 8."""
    assert convert(value, unit, to) == pytest.approx(wanted, rel=1e-14)


def test_decimal_conversions_leave_no_dust() -> None:
    assert [convert(value, "ms", "s") for value in (1, 3, 7, 120, 0.3)] == [0.001, 0.003, 0.007, 0.12, 0.0003]
    assert convert(0.3, "s", "us") == 300000.0


@given(st.integers(-27315, 500000))
def test_conversions_with_an_offset_leave_no_dust(hundredths: int) -> None:
    assert convert((hundredths + 27315) / 100, "K", "degC") == hundredths / 100
    assert convert(hundredths / 100, "degC", "K") == (hundredths + 27315) / 100
    assert convert(hundredths / 100, "degC", "degF") == round(hundredths * 0.018 + 32, 6)
    assert convert(convert(hundredths / 100, "degC", "degF"), "degF", "degC") == hundredths / 100


@given(st.floats(-1e300, 1e300), st.sampled_from([("ms", "s"), ("G", "T"), ("nK", "K"), ("MHz", "Hz")]))
def test_there_and_back(value: float, units: tuple[str, str]) -> None:
    there = convert(value, *units)
    assert convert(there, *reversed(units)) == pytest.approx(value, rel=1.1e-14, abs=1e-300)


@pytest.mark.parametrize(
    ("one", "other"),
    [("ms", "A"), ("Hz", "rad/s"), ("rad", ""), ("deg", "percent"), ("rad/s", "1/s"), ("G", ""), ("K", "J")],
)
def test_what_does_not_convert(one: str, other: str) -> None:
    assert not convertible(one, other)
    assert not convertible(other, one)
    with pytest.raises(UnitError, match="convert"):
        convert(1, one, other)


@pytest.mark.parametrize("unit", ["blorps", "m/", "A;A", "1 +", "x" * 101, "__import__('os')", "="])
def test_unknown_units(unit: str) -> None:
    with pytest.raises(UnitError, match="is not known; examples: A, ms, MHz, nK, G, atoms"):
        parse_unit(unit)


def test_the_form_kept() -> None:
    assert parse_unit(" ms ") == "ms"
    assert parse_unit("\u03bcK") == parse_unit("\u00b5K") == "\u00b5K"
    assert parse_unit("1") == parse_unit("") == ""
    assert convertible("\u03bcK".replace("\u03bc", "\u00b5"), "uK")


def test_standard_uncertainties_are_scaled_never_moved() -> None:
    assert conversion("degC", "K").value(20) == 293.15
    assert conversion("degC", "K").stderr(0.5) == 0.5
    assert conversion("degC", "degF").stderr(1) == pytest.approx(1.8)
    assert conversion("degF", "K").stderr(9) == pytest.approx(5)
    assert conversion("ms", "s").stderr(3) == 0.003
    with pytest.raises(UnitError, match="a standard uncertainty in dBm cannot be converted to mW"):
        conversion("dBm", "mW").stderr(0.1)


def test_infinite_and_missing_values() -> None:
    assert convert(math.inf, "ms", "s") == convert(math.inf, "K", "degC") == math.inf
    assert math.isnan(convert(math.nan, "degF", "degC"))
    assert math.isnan(convert(math.nan, "ms", "s"))

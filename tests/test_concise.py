from __future__ import annotations

import math
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nightfold.concise import asymmetric, concise, in_parts, interval, parse_concise, plain, short

VALUES = st.floats(min_value=-1e30, max_value=1e30, allow_nan=False)
STDERRS = st.floats(min_value=1e-30, max_value=1e30)


@pytest.mark.parametrize(
    ("value", "stderr", "text"),
    [
        (33.61234, 0.0137, "33.612(14)"),
        (-121034.0, 3120.0, "-1.210(31)e5"),
        (123400.0, 5600.0, "1.234(56)e5"),
        (1.234e-5, 5.6e-7, "1.234(56)e-5"),
        (1.0, 0.0996, "1.00(10)"),
        (12.3, 9.96, "12(10)"),
        (33.6, 1.4, "33.6(1.4)"),
        (0.2, 1.3, "0.2(1.3)"),
        (336.0, 12.3, "336(12)"),
        (0.0, 0.05, "0.000(50)"),
        (0.0, 1e-9, "0.0(1.0)e-9"),
        (-0.0, 0.05, "0.000(50)"),
        (-0.001, 0.02, "-0.001(20)"),
        (99990.0, 3100.0, "1.000(31)e5"),
        (384228115.2, 0.6, "384228115.20(60)"),
        (3e4, 5e6, "0.0(5.0)e6"),
    ],
)
def test_two_digits_of_stderr(value: float, stderr: float, text: str) -> None:
    assert concise(value, stderr) == text


@pytest.mark.parametrize("stderr", [0.0, math.nan, math.inf, -1.0, 1e-300])
def test_value_alone_without_a_usable_stderr(stderr: float) -> None:
    assert concise(33.5, stderr) == "33.5"


def test_value_that_is_no_number() -> None:
    assert concise(math.nan, 1.0) == "nan"
    assert concise(math.inf, 1.0) == "inf"


@given(VALUES, STDERRS)
def test_reads_back_to_half_the_last_digit(value: float, stderr: float) -> None:
    text = concise(value, stderr)
    if "(" not in text:
        assert stderr < abs(value) * 1e-15
        return
    back, back_stderr = parse_concise(text)
    quantum = 10.0 ** (math.floor(math.log10(stderr)) - 1)
    rounding = abs(Decimal(value)) * Decimal("1e-15")
    assert abs(Decimal(back) - Decimal(value)) <= Decimal(quantum * 5.0001) + rounding
    assert back_stderr == pytest.approx(stderr, rel=0.051)


@given(VALUES, STDERRS)
def test_sign_changes_nothing_else(value: float, stderr: float) -> None:
    assert concise(-abs(value), stderr).lstrip("-") == concise(abs(value), stderr)


@given(VALUES, STDERRS)
def test_stays_short(value: float, stderr: float) -> None:
    digits = 18 + max(0, math.ceil(math.log10(max(1.0, abs(value)))) if stderr < 10 else 0)
    assert len(concise(value, stderr)) <= digits + 22


def test_what_is_not_concise_is_not_read() -> None:
    with pytest.raises(ValueError, match="concise"):
        parse_concise("33.6 +- 0.1")


def test_lopsided_interval_is_shown() -> None:
    assert asymmetric(33.6, 0.015, 33.59, 33.62) == "33.600 +0.020/-0.010"
    assert asymmetric(12e4, 3e3, 11.8e4, 12.5e4) == "(1.200 +0.050/-0.020)e5"


def test_interval_that_is_nearly_even_is_not() -> None:
    assert asymmetric(33.6, 0.0137, 33.6 - 0.0130, 33.6 + 0.0142) == "33.600(14)"


def test_interval_is_as_fine_as_its_value() -> None:
    assert interval(33.57, 33.64, 33.6, 0.014) == "33.570 … 33.640"
    assert interval(1.18e5, 1.25e5, 1.2e5, 2e3) == "1.180e5 … 1.250e5"


@pytest.mark.parametrize(
    ("value", "stderr", "low", "high", "shown", "ends"),
    [
        (33.6, 0.014, -math.inf, 33.64, "not determined", "below 33.64"),
        (12836.0, 2.5e7, 3100.0, math.inf, "not determined", "above 3.1e3"),
        (12836.0, 2.5e7, 3.2, 1e12, "not determined", "not determined"),
        (1e7, 1e12, 0.0, math.inf, "not determined", "not determined"),
        (0.86, 9.7, 8e-11, 9.3e9, "not determined", "not determined"),
        (1e7, math.nan, -math.inf, math.inf, "not determined", "not determined"),
        (1e7, math.nan, math.nan, math.nan, "not determined", "not determined"),
    ],
)
def test_what_is_not_determined_has_no_digits(
    value: float, stderr: float, low: float, high: float, shown: str, ends: str
) -> None:
    assert asymmetric(value, stderr, low, high) == shown
    assert interval(low, high, value, stderr) == ends


@pytest.mark.parametrize(
    ("number", "text"),
    [
        (0.1 + 0.2, "0.3"),
        (61.25, "61.25"),
        (121000.0, "121000"),
        (1e-7, "1e-7"),
        (math.nan, "nan"),
        (-0.0, "0"),
    ],
)
def test_plain(number: float, text: str) -> None:
    assert plain(number) == text


@pytest.mark.parametrize(
    ("number", "text"), [(121000.123, "121000"), (0.0417283, "0.041728"), (3.2e-9, "3.2e-9")]
)
def test_short(number: float, text: str) -> None:
    assert short(number) == text


def test_two_uncertainties_share_the_place_of_the_larger() -> None:
    assert in_parts(61.3617, 0.0201, 0.0068) == "61.362(20)(7)"
    assert in_parts(61.3617, 0.0031, 0.41) == "61.36(0)(41)"
    assert in_parts(121034.0, 3120.0, 410.0) == "1.210(31)(4)e5"
    assert in_parts(5.0, 2.3, 1.1) == "5.0(2.3)(1.1)"
    assert in_parts(61.3617, float("inf"), 0.1) == "61.3617"

"""Values and uncertainties of many shots, against the package uncertainties shot by shot, and by hand."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from uncertainties import UFloat, ufloat, umath

from nightfold.formulas.definitions import Definition, Derived, Recorded, settle_definitions
from nightfold.formulas.evaluation import evaluate

Floats = NDArray[np.float64]
RECORDED = {
    "x": Recorded("observable", ""),
    "y": Recorded("observable", ""),
    "p": Recorded("parameter", ""),
}


def settle(expression: str, **others: str) -> Derived:
    definitions = {name: Definition(text) for name, text in others.items()}
    return settle_definitions({**definitions, "d": Definition(expression)}, RECORDED, {})["d"]


def run(derived: Derived, **inputs: tuple[list[float], list[float]]) -> tuple[Floats, Floats]:
    readings = {name: (np.array(inputs[name][0]), np.array(inputs[name][1])) for name in derived.observables}
    settings = {name: np.array(inputs[name][0]) for name in derived.parameters}
    return evaluate(derived.formulas, ["d"], settings, readings)["d"]


def one(expression: str, x: UFloat, y: UFloat, **others: str) -> tuple[float, float]:
    columns = {name: ([item.nominal_value], [item.std_dev]) for name, item in (("x", x), ("y", y))}
    value, stderr = run(settle(expression, **others), **columns, p=([2.0], []))
    return float(value[0]), float(stderr[0])


def test_by_hand_the_polarisation() -> None:
    value, stderr = one("(x - y) / (x + y)", ufloat(6e4, 600), ufloat(3e4, 300))
    assert value == pytest.approx(1 / 3, rel=1e-14)
    # 2 sqrt((y sx)^2 + (x sy)^2) / (x + y)^2
    assert stderr == pytest.approx(2 * math.hypot(3e4 * 600, 6e4 * 300) / 9e4**2, rel=1e-12)


@pytest.mark.parametrize(
    ("expression", "others"),
    [("x / (x + y)", {}), ("x / total", {"total": "x + y"}), ("1 / (1 + r)", {"r": "y / x"})],
)
def test_shared_inputs_count_as_such_however_it_is_written(expression: str, others: dict[str, str]) -> None:
    value, stderr = one(expression, ufloat(30.0, 2.0), ufloat(10.0, 1.0), **others)
    assert (value, stderr) == pytest.approx((0.75, math.hypot(10 * 2, 30 * 1) / 1600), rel=1e-12)


def test_what_cancels_has_no_uncertainty() -> None:
    assert one("x - x", ufloat(3, 1), ufloat(1, 1)) == (0.0, 0.0)
    assert one("a - x", ufloat(3, 1), ufloat(1, 1), a="x + p") == (2.0, 0.0)


def _spread(low: UFloat, high: UFloat) -> UFloat:
    return low + 3 * (high if high.n > 2 else 2.0)


REFERENCES = {
    "x*y - p*x": lambda x, y: x * y - 2.0 * x,
    "sqrt(x)*exp(-y/10)": lambda x, y: umath.sqrt(x) * umath.exp(-y / 10),
    "log(x) + log10(y)": lambda x, y: umath.log(x) + umath.log10(y),
    "sin(x)*cos(y) + tan(x/40)": lambda x, y: umath.sin(x) * umath.cos(y) + umath.tan(x / 40),
    "arctan2(x, y) - arctan(x/y)": lambda x, y: umath.atan2(x, y) - umath.atan(x / y),
    "abs(x - y)": lambda x, y: x - y if x.n > y.n else y - x,
    "min(x, y) + 3*max(x, y, p)": lambda x, y: _spread(*((x, y) if x.n < y.n else (y, x))),
    "x**1.5 + x**p + 2**y": lambda x, y: x**1.5 + x**2.0 + 2.0**y,
    "(x/y)**-3": lambda x, y: (x / y) ** -3,
}  # fmt: skip


@pytest.mark.parametrize("expression", list(REFERENCES))
@given(
    x=st.floats(0.1, 30), y=st.floats(0.1, 30), sx=st.floats(0.001, 5), sy=st.floats(0.001, 5)
)  # fmt: skip
def test_values_and_uncertainties_are_those_of_uncertainties(
    expression: str, x: float, y: float, sx: float, sy: float
) -> None:
    if x == y:
        return
    a, b = ufloat(x, sx), ufloat(y, sy)
    wanted = REFERENCES[expression](a, b)
    value, stderr = one(expression, a, b)
    assert value == pytest.approx(wanted.nominal_value, rel=1e-9, abs=1e-9)
    assert stderr == pytest.approx(wanted.std_dev, rel=1e-9, abs=1e-9)


def test_a_shot_without_an_input_or_out_of_range_is_nan_and_no_other() -> None:
    nan = math.nan
    derived = settle("sqrt(x - y) / p")
    x = [5.0, nan, 1.0, 5.0, 5.0, math.inf, 5.0, 1.0]
    y = [1.0, 1.0, 2.0, 1.0, nan, 1.0, 1.0, 1.0]
    p = [2.0, 2.0, 2.0, 0.0, 2.0, 2.0, nan, 2.0]
    value, stderr = run(derived, x=(x, [0.4] * 8), y=(y, [0.3] * 8), p=(p, []))
    assert np.array_equal(value, [1.0, nan, nan, nan, nan, nan, nan, 0.0], equal_nan=True)
    # d sqrt(u) / p = du / (2 p sqrt u); at the edge of the root it has no bound
    assert np.array_equal(stderr, [0.0625, *[nan] * 7], equal_nan=True)


def test_one_uncertainty_that_is_missing_takes_that_of_the_result() -> None:
    value, stderr = run(
        settle("x + y"), x=([1.0, 1.0, 1.0], [3.0, 3.0, 0.0]), y=([1.0] * 3, [4.0, math.nan, 2.0])
    )
    assert value.tolist() == [2.0, 2.0, 2.0]
    assert np.array_equal(stderr, [5.0, math.nan, 2.0], equal_nan=True)


def test_no_value_to_the_power_of_zero_is_no_value() -> None:
    value, _ = run(settle("x**0 + max(x, y)"), x=([math.nan, 1.0], [1.0, 1.0]), y=([2.0, 2.0], [1.0, 1.0]))
    assert np.array_equal(value, [math.nan, 3.0], equal_nan=True)


def test_settings_alone_have_no_uncertainty() -> None:
    value, stderr = run(settle("2*p - 3"), p=([2.0, math.nan], []))
    assert np.array_equal(value, [1.0, math.nan], equal_nan=True)
    assert np.isnan(stderr).all()


def test_a_difference_leaves_no_dust() -> None:
    aom = [74.95 + k / 100 for k in range(2000)]
    value, _ = run(settle("2*p - 160"), p=(aom, []))
    assert [repr(each) for each in value.tolist()] == [repr(float(f"{2 * each - 160:.10f}")) for each in aom]
    value, _ = run(settle("p - 1"), p=([1e300, 384230406.3730017, 1 + 1e-13, 0.0, 1e-30], []))
    assert value.tolist() == pytest.approx([1e300, 384230405.3730017, 1e-13, -1.0, -1.0], rel=1e-2)
    value, _ = run(settle("p + p"), p=([1e-30, 1e-300, 3e-324, 1e307, 8.5e307], []))
    assert value.tolist() == [2e-30, 2e-300, 1e-323, 2e307, 1.7e308]


def test_ten_thousand_shots_take_a_moment() -> None:
    n, random = 10_000, np.random.default_rng(1)
    derived = settle("(x - y) / (x + y)")
    readings = {name: (random.normal(1e5, 1e3, n), np.full(n, 1e3)) for name in ("x", "y")}
    began = time.process_time()
    evaluate(derived.formulas, ["d"], {}, readings)
    assert time.process_time() - began < 2.0

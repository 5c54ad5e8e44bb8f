"""Expressions: their units against pint, what is refused, and nothing of them that reaches Python."""

from __future__ import annotations

import math

import numpy as np
import pint
import pytest

from nightfold.errors import FormulaError
from nightfold.formulas.definitions import Definition, DefinitionError, Derived, Recorded, settle_definitions
from nightfold.formulas.evaluation import evaluate
from nightfold.formulas.tokens import FUNCTIONS

RECORDED = {
    "aom_frequency": Recorded("parameter", "MHz"),
    "hold_time": Recorded("parameter", "ms"),
    "coil_current": Recorded("parameter", "A"),
    "hold#2.duration": Recorded("parameter", "us"),
    "odd name": Recorded("parameter", "G"),
    "lambda": Recorded("parameter", "nm"),
    "oven": Recorded("parameter", "degC"),
    "ratio": Recorded("parameter", ""),
    "power_dbm": Recorded("parameter", "dBm"),
    "axis": Recorded("parameter", None, "text"),
    "shutter": Recorded("parameter", None, "truth"),
    "loose": Recorded("parameter", None),
    "G": Recorded("parameter", "A"),
    "atom_number": Recorded("observable", "atoms"),
    "temperature": Recorded("observable", "nK"),
}
VALUES = {
    "aom_frequency": 80.5,
    "hold_time": 3.0,
    "coil_current": 61.25,
    "hold#2.duration": 250.0,
    "odd name": 33.6,
    "lambda": 767.0,
    "oven": 180.0,
    "ratio": 0.25,
    "G": 2.0,
    "atom_number": 1.2e5,
    "temperature": 400.0,
}


def settle(expression: str, unit: str | None = None, **others: str) -> Derived:
    clouds = {name: entry for name, entry in RECORDED.items() if entry.role == "observable"}
    definitions = {name: Definition(text) for name, text in others.items()}
    return settle_definitions({**definitions, "d": Definition(expression, unit)}, RECORDED, clouds)["d"]


def value_of(expression: str, unit: str | None = None, **others: str) -> float:
    derived = settle(expression, unit, **others)
    column = {
        name: np.array([VALUES[name.split("[")[0]]]) for name in (*derived.parameters, *derived.observables)
    }
    settings = {name: column[name] for name in derived.parameters}
    readings = {name: (column[name], np.array([1.0])) for name in derived.observables}
    return float(evaluate(derived.formulas, ["d"], settings, readings)["d"][0][0])


def refusal(expression: str, unit: str | None = None, **others: str) -> FormulaError:
    with pytest.raises(FormulaError) as problem:
        settle(expression, unit, **others)
    return problem.value


REGISTRY = pint.UnitRegistry(autoconvert_offset_to_baseunit=True, cache_folder=None)
REGISTRY.define("my_gauss = 1e-4 * tesla")
F, T, C, STEP, B, OVEN, TEMP = (
    REGISTRY.Quantity(VALUES[name], unit)
    for name, unit in (
        ("aom_frequency", "MHz"),
        ("hold_time", "ms"),
        ("coil_current", "A"),
        ("hold#2.duration", "us"),
        ("odd name", "my_gauss"),
        ("oven", "degC"),
        ("temperature", "nK"),
    )
)


def number(value: float, unit: str) -> pint.Quantity[float]:
    return REGISTRY.Quantity(value, unit)


@pytest.mark.parametrize(
    ("expression", "unit", "reference"),
    [
        ("2*aom_frequency - 160 MHz", "MHz", 2 * F - number(160, "MHz")),
        ("2*aom_frequency - 160000 kHz", "Hz", 2 * F - number(160, "MHz")),
        ("160 kHz + aom_frequency", "MHz", number(160, "kHz") + F),
        ("hold_time + hold#2.duration", "s", T + STEP),
        ("hold_time - 1.5 us", "us", T - number(1.5, "us")),
        ("aom_frequency * hold_time", "", F * T),
        ("hold_time * 2 1/ms", "", T * number(2, "1/ms")),
        ("1.4 MHz/T * `odd name`", "kHz", number(1.4, "MHz/T") * B),
        ("3 m/s*hold_time", "mm", number(3, "m/s") * T),
        ("aom_frequency**2 / 2 kHz", "GHz", F**2 / number(2, "kHz")),
        ("sqrt(hold_time * 4 us)", "us", (T * number(4, "us")) ** 0.5),
        ("hold_time**(1/2) * hold_time**0.5", "ms", T),
        ("exp(-hold_time / 0.002 s)", "", number(math.exp(-1.5), "")),
        ("log(aom_frequency / 1 kHz)", "", number(math.log(80500), "")),
        ("log10(aom_frequency / 1 Hz)", "", number(math.log10(80.5e6), "")),
        ("sin(30 deg * ratio / ratio)", "", number(0.5, "")),
        ("cos(pi * ratio)", "", number(math.cos(math.pi / 4), "")),
        ("tan(ratio * 1 rad)", "", number(math.tan(0.25), "")),
        ("arctan(ratio)", "deg", number(math.degrees(math.atan(0.25)), "deg")),
        ("arctan2(hold_time, -hold#2.duration)", "rad", number(math.atan2(3.0, -0.25), "rad")),
        ("2*pi*(1 rad)*aom_frequency", "rad/s", number(2 * math.pi * 80.5e6, "rad/s")),
        ("abs(1 ms - hold_time)", "ms", number(2, "ms")),
        ("min(hold_time, hold#2.duration, 1 s)", "us", STEP),
        ("max(hold_time, hold#2.duration)", "us", T),
        ("oven - 20 degC", "K", number(160, "K")),
        ("oven * 2", "K", number(2 * 453.15, "K")),
        ("1 k_B * temperature", "J", number(1, "k_B") * TEMP),
        ("ratio ** ratio", "", number(0.25**0.25, "")),
        ("-ratio ** 2", "", number(-(0.25**2), "")),
        ("2 ** -ratio ** 2", "", number(2 ** -(0.25**2), "")),
    ],
)
def test_values_are_those_of_pint(expression: str, unit: str, reference: pint.Quantity[float]) -> None:
    assert value_of(expression, unit) == pytest.approx(
        reference.to(unit or "dimensionless").magnitude, rel=1e-12
    )


@pytest.mark.parametrize(
    ("expression", "value", "unit"),
    [
        ("2*aom_frequency - 160 MHz", 1.0, "MHz"),
        ("aom_frequency * hold_time", 241.5e3, ""),
        ("atom_number + 1", 120001.0, "atoms"),
        ("hold_time + 1 s", 1003.0, "ms"),
        ("coil_current/hold_time", 61.25 / 3, "A / ms"),
        ("160 MHz/G*hold_time", 240.0, "MHz * ms / A"),
        ("arctan2(ratio, ratio)", math.pi / 4, "rad"),
        ("lambda*2", 1534.0, "nm"),
        ("`lambda`*2", 1534.0, "nm"),
    ],
)
def test_without_a_unit_the_result_has_that_of_the_expression(
    expression: str, value: float, unit: str
) -> None:
    assert settle(expression).unit == unit
    assert value_of(expression) == pytest.approx(value, rel=1e-14)


def test_what_rests_on_derived_quantities_is_followed_to_what_is_recorded() -> None:
    derived = settle("a / b", a="atom_number[up] - atom_number[down]", b="a + hold_time/hold_time")
    assert (derived.role, derived.parameters, list(derived.formulas)) == (
        "observable",
        ("hold_time",),
        ["a", "b", "d"],
    )
    assert derived.observables == ("atom_number[up]", "atom_number[down]")
    assert settle("2*a", a="aom_frequency - 80 MHz").role == "parameter"


@pytest.mark.parametrize(
    ("expression", "unit", "found", "wanted"),
    [
        ("aom_frequency + hold_time", None, "aom_frequency (MHz) + hold_time (ms)", "ms does not convert to MHz"),
        ("2*aom_frequency", "ms", "an expression in MHz", "one in ms"),
        ("2*pi*aom_frequency", "rad/s", "an expression in MHz", "a factor 2 pi"),
        ("exp(hold_time)", None, "exp(hold_time) of hold_time (ms)", "a pure number"),
        ("2**hold_time", None, "hold_time (ms)", "a pure number"),
        ("hold_time**ratio", None, "hold_time (ms)", "a pure number"),
        ("sin(coil_current)", None, "coil_current (A)", "a pure number"),
        ("min(hold_time, aom_frequency)", None, "min(hold_time (ms), aom_frequency (MHz))", "one kind"),
        ("ratio**31", None, "the power 31", "from -30 to 30"),
        ("oven", "degC", "the unit degC", "such as K"),
        ("power_dbm*2", None, "power_dbm (dBm)", "no logarithmic unit"),
        ("axis*2", None, "axis, a text", "numbers"),
        ("shutter*2", None, "shutter, a truth", "numbers"),
        ("loose*2", None, "loose, whose unit the card does not say", "[parameters.loose] unit"),
        ("atom_numbr*2", None, "'atom_numbr'", "such as atom_number"),
        ("T * 2", None, "'T'", "the unit is 1 T"),
        ("hold_time[up]", None, "'hold_time[up]'", "a name of this card"),
        ("160 MHz", None, "no parameter and no observable", "at least one"),
        ("", None, "nothing", "an expression"),
        ("2 hold_time", None, "'hold_time'", "an operator before the name: * hold_time"),
        ("3 ms**2 * ratio", None, "a power directly behind the unit ms", "(3 ms)**2"),
        ("ratio + 3 mss", None, "'mss'", "a unit that is known"),
        ("2*ratio -", None, "'-' at the end", "behind it"),
        ("(ratio", None, "1 '(' too many", "one ')' for each '('"),
        ("ratio ratio", None, "'ratio ratio'", "one operator between"),
        ("ratio // 2", None, "'/ /'", "one operator between"),
        ("*ratio", None, "'*'", "one operator between"),
        ("ratio \N{MINUS SIGN} 2", None, "'\N{MINUS SIGN}'", "the sign - of the keyboard"),
        ("2*\N{GREEK SMALL LETTER PI}*ratio", None, "the name '\N{GREEK SMALL LETTER PI}'", "pi, written so"),
        ("ratio ^ 2", None, "'^'", "** for a power"),
        ("x = ratio", None, "'='", "on the right"),
        ("ratio, 2", None, "a comma", "only between the arguments"),
        ("min(ratio)", None, "min of 1 arguments", "2 or more"),
        ("sqrt(ratio, 2)", None, "sqrt of 2 arguments", "1 of them"),
        ("1e999 * ratio", None, "1e999", "below 1e308"),
    ],
)  # fmt: skip
def test_what_does_not_fit_is_refused_with_the_reason(
    expression: str, unit: str | None, found: str, wanted: str
) -> None:
    problem = refusal(expression, unit)
    assert found in problem.found
    assert wanted in problem.wanted


@pytest.mark.parametrize(
    "expression",
    [
        "__import__('os').system('true')",
        "__import__",
        "ratio.__class__",
        "ratio.__class__.__mro__[1]",
        "(ratio).real",
        "open('/etc/passwd')",
        "eval(ratio)",
        "print(ratio)",
        "sqrt.__globals__",
        "sqrt",
        "[ratio for ratio in ratio]",
        "{ratio}",
        "lambda: ratio",
        "ratio if ratio else ratio",
        "ratio < 2",
        "ratio and ratio",
        "ratio := 2",
        "(ratio := 2)",
        "f'{ratio}'",
        "'a' * ratio",
        "ratio[0]",
        "sqrt(*ratio)",
        "sqrt(x=ratio)",
        "ratio @ ratio",
        "~ratio",
        "ratio # comment",
        "ratio; ratio",
        "ratio\\\n+ratio",
        "ratio\0",
        "await ratio",
        "x0",
        "q0",
        "ratio + x0",
        "power(ratio, 2)",
        "`x0`",
        "`ratio\n+ratio`",
        "ratio**9**9**9",
        "0j * ratio",
        "ratio" + "+ratio" * 400,
        "-" * 900 + "ratio",
        "(" * 400 + "ratio" + ")" * 400,
        "sqrt(" * 100 + "ratio" + ")" * 100,
    ],
)
def test_hostile_expressions_are_refused(expression: str) -> None:
    refusal(expression)


def test_a_tower_of_powers_is_no_number_and_takes_no_memory() -> None:
    assert math.isnan(value_of("ratio * ((9**30)**30)**30"))
    assert refusal("ratio * 9**9**9").found == "the power 3.8742e+08"


def test_quantities_made_of_each_other_are_refused() -> None:
    with pytest.raises(DefinitionError, match="a circle: d -> a -> b -> d") as problem:
        settle_definitions(
            {"d": Definition("a"), "a": Definition("b+1"), "b": Definition("2*d")}, RECORDED, {}
        )
    assert problem.value.name == "d"
    assert "a circle: d -> d" in refusal("2*d").found


def test_many_quantities_made_of_each_other_cost_little() -> None:
    definitions = {"d0": Definition("ratio")} | {
        f"d{k}": Definition(f"(d{k - 1} + d{k - 1}) / 2") for k in range(1, 40)
    }
    last = settle_definitions(definitions, RECORDED, {})["d39"]
    assert evaluate(last.formulas, ["d39"], {"ratio": np.array([0.25])}, {})["d39"][0].tolist() == [0.25]
    too_deep = {f"d{k}": Definition(f"d{k + 1}") for k in range(100)} | {"d100": Definition("ratio")}
    with pytest.raises(DefinitionError, match="fewer"):
        settle_definitions(too_deep, RECORDED, {})


def test_every_function_of_the_language_is_computed() -> None:
    for name in FUNCTIONS:
        arguments = "ratio, 2*ratio" if name in ("arctan2", "min", "max") else "ratio"
        assert math.isfinite(value_of(f"{name}({arguments})"))

"""Formulas computed for many shots at once, with standard uncertainties that know which inputs are shared.

Values are computed with numpy. Uncertainties are propagated to first order by the package uncertainties (GUM,
JCGM 100:2008, equation 10): every reading is one independent variable, and what is derived of it, however many steps
away, remembers how it depends on it, so ``x / (x + y)`` is right.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Collection, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from nightfold.formulas.formula import Formula

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

Readings = tuple["Floats", "Floats"]


def evaluate(
    formulas: Mapping[str, Formula],
    wanted: Collection[str],
    settings: Mapping[str, Floats],
    readings: Mapping[str, Readings],
) -> dict[str, Readings]:
    """Return values and standard uncertainties of the quantities wanted.

    Parameters
    ----------
    formulas : mapping of str to Formula
        Those that others depend on first.
    wanted : collection of str
        Which of them.
    settings : mapping of str to (n,) float array
        Exact inputs; NaN where a shot has none.
    readings : mapping of str to pair of (n,) float arrays
        Inputs with their standard uncertainties.

    Returns
    -------
    dict of str to pair of (n,) float arrays
        A value is NaN where an input is, or where it cannot be computed (the root of a negative number, 1/0). A
        standard uncertainty is NaN besides where a reading that goes into it has none, and for formulas of settings
        alone.
    """
    values = _values(formulas, {**settings, **{name: value for name, (value, _) in readings.items()}})
    return {name: (values[name], _stderr(name, formulas, values, readings)) for name in wanted}


def _values(formulas: Mapping[str, Formula], inputs: Mapping[str, Floats]) -> dict[str, Floats]:
    """Return the inputs and what the formulas make of them."""
    import numpy as np

    values = dict(inputs)
    functions = _numeric()
    for name, formula in formulas.items():
        own = [values[each] for each in formula.names]
        with np.errstate(all="ignore"):
            result = np.asarray(_run(formula, values, functions), dtype=np.float64)
        known = np.isfinite(result) & ~np.any([np.isnan(each) for each in own], axis=0)
        values[name] = np.where(known, result, np.nan)
    return values


def _stderr(
    name: str, formulas: Mapping[str, Formula], values: Mapping[str, Floats], readings: Mapping[str, Readings]
) -> Floats:
    """Return the standard uncertainty of one quantity."""
    import numpy as np

    used = _needed(formulas, name)
    inputs = {own for formula in used.values() for own in formula.names} - used.keys()
    read = [own for own in readings if own in inputs]
    stderr = np.full(len(values[name]), np.nan)
    if read:
        known = np.isfinite(values[name]) & np.all(
            [np.isfinite(readings[own]).all(axis=0) for own in read], axis=0
        )
        exact = {own: values[own][known] for own in inputs if own not in readings}
        uncertain = {own: (readings[own][0][known], readings[own][1][known]) for own in read}
        stderr[known] = _propagate(used, exact, uncertain)
    return stderr


def _needed(formulas: Mapping[str, Formula], name: str) -> dict[str, Formula]:
    """Return one formula and those that it rests on, in order."""
    wanted = {name}
    for other in reversed(list(formulas)):
        if other in wanted:
            wanted.update(formulas[other].names)
    return {other: formula for other, formula in formulas.items() if other in wanted}


def _run(formula: Formula, values: Mapping[str, Any], functions: Mapping[str, Any]) -> Any:
    """Return the value of one formula; the second fence round it knows numbers and the functions, nothing else."""
    from asteval import Interpreter

    symbols = {**functions, **{f"x{number}": values[name] for number, name in enumerate(formula.names)}}
    interpreter = Interpreter(symtable=symbols, minimal=True, use_numpy=False)
    interpreter.symtable.pop("print", None)
    return interpreter.run(interpreter.parse(formula.python), with_raise=True)


def _propagate(
    formulas: Mapping[str, Formula], settings: Mapping[str, Floats], readings: Mapping[str, Readings]
) -> Floats:
    """Return the standard uncertainty of the last of the formulas; all numbers are finite."""
    import numpy as np
    from uncertainties import unumpy

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # of standard uncertainties that are 0
        uncertain = {name: unumpy.uarray(value, stderr) for name, (value, stderr) in readings.items()}
        try:
            stderr = unumpy.std_devs(_run_all(formulas, {**settings, **uncertain}))
        except (ArithmeticError, ValueError, TypeError):  # at one shot at least: one by one then
            count = len(next(iter(readings.values()))[0])
            stderr = np.array([_one(formulas, settings, uncertain, place) for place in range(count)])
    return np.where(np.isfinite(stderr), stderr, np.nan)


def _run_all(formulas: Mapping[str, Formula], values: dict[str, Any]) -> Any:
    functions = _uncertain()
    for name, formula in formulas.items():
        values[name] = _run(formula, values, functions)
    return values[list(formulas)[-1]]


def _one(
    formulas: Mapping[str, Formula], settings: Mapping[str, Any], uncertain: Mapping[str, Any], place: int
) -> float:
    """Return the standard uncertainty at one shot, NaN where there is none (at the edge of a square root)."""
    from uncertainties import std_dev

    inputs = {name: column[place] for name, column in (*settings.items(), *uncertain.items())}
    try:
        return float(std_dev(_run_all(formulas, inputs)))
    except (ArithmeticError, ValueError, TypeError):
        return float("nan")


def _numeric() -> dict[str, Callable[..., Any]]:
    """Return the functions for arrays of floats."""
    import numpy as np

    names = ("sqrt", "exp", "log", "log10", "sin", "cos", "tan", "arctan", "arctan2", "abs", "power")
    functions: dict[str, Callable[..., Any]] = {name: getattr(np, name) for name in names}
    functions["plus"] = lambda a, b: _without_dust(a + b, a, b)
    functions["minus"] = lambda a, b: _without_dust(a - b, a, b)
    functions["min"] = lambda *items: _reduce(np.minimum, items)
    functions["max"] = lambda *items: _reduce(np.maximum, items)
    return functions


def _without_dust(result: Any, *terms: Any) -> Any:
    """Return a sum rounded to 15 digits of its largest term: 2*74.95 - 160 is -10.1, not -10.099999999999994."""
    import numpy as np

    largest = np.max([np.broadcast_to(np.abs(term), np.shape(result)) for term in terms], axis=0)
    digits = 14 - np.floor(np.log10(largest))
    scale = 10.0 ** np.clip(digits, 0, 22)
    rounded = np.round(result * scale) / scale
    return np.where((digits >= 0) & (digits <= 22), rounded, result)


def _uncertain() -> dict[str, Callable[..., Any]]:
    """Return the functions for object arrays of uncertain numbers, and for single ones."""
    import operator

    import numpy as np
    from uncertainties import nominal_value, umath

    plain = {"arctan": "atan", "arctan2": "atan2"}
    names = ("sqrt", "exp", "log", "log10", "sin", "cos", "tan", "arctan", "arctan2")
    functions: dict[str, Callable[..., Any]] = {
        name: np.frompyfunc(getattr(umath, plain.get(name, name)), 2 if name == "arctan2" else 1, 1)
        for name in names
    }
    functions |= {"plus": operator.add, "minus": operator.sub, "power": np.frompyfunc(operator.pow, 2, 1)}
    functions["abs"] = np.frompyfunc(lambda a: a if nominal_value(a) >= 0 else -a, 1, 1)
    smaller = np.frompyfunc(lambda a, b: a if nominal_value(a) <= nominal_value(b) else b, 2, 1)
    larger = np.frompyfunc(lambda a, b: a if nominal_value(a) >= nominal_value(b) else b, 2, 1)
    functions["min"] = lambda *items: _reduce(smaller, items)
    functions["max"] = lambda *items: _reduce(larger, items)
    return functions


def _reduce(join: Callable[[Any, Any], Any], items: Sequence[Any]) -> Any:
    result = items[0]
    for item in items[1:]:
        result = join(result, item)
    return result

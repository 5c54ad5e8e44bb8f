"""All derived quantities of a card together: what each is made of, in which order, and of which kind."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Literal

from nightfold.errors import FormulaError, UnitError
from nightfold.formulas.formula import Expression, Formula, parse_expression, settle_formula

Role = Literal["parameter", "observable"]


@dataclass(frozen=True, slots=True)
class Recorded:
    """What the card says about a recorded name: its unit (None: not stated) and, of a parameter, its kind."""

    role: Role
    unit: str | None
    kind: str | None = "number"


@dataclass(frozen=True, slots=True)
class Definition:
    """A derived quantity as the card defines it: its expression, and the unit wanted (None: that of the expression)."""

    expression: str
    unit: str | None = None


@dataclass(frozen=True, slots=True)
class Derived:
    """A derived quantity, ready to be computed.

    Attributes
    ----------
    name : str
    role : {'parameter', 'observable'}
        An observable if any reading goes into it.
    formulas : dict of str to Formula
        Those of the derived quantities that it rests on, in order, and its own at the end.
    parameters, observables : tuple of str
        The recorded names that it rests on in the end.
    """

    name: str
    role: Role
    formulas: dict[str, Formula] = field(hash=False)
    parameters: tuple[str, ...]
    observables: tuple[str, ...]

    @property
    def unit(self) -> str:
        """Unit of the quantity."""
        return self.formulas[self.name].unit


class DefinitionError(FormulaError):
    """An expression of the card that cannot be used, with the name of its quantity."""

    def __init__(self, name: str, found: str, wanted: str) -> None:
        super().__init__(found, wanted)
        self.name = name


def settle_definitions(
    definitions: Mapping[str, Definition], recorded: Mapping[str, Recorded], clouds: Mapping[str, Recorded]
) -> dict[str, Derived]:
    """Return the derived quantities of a card, each behind those that it is made of.

    Parameters
    ----------
    definitions : mapping of str to Definition
    recorded : mapping of str to Recorded
        Parameters and observables of the card.
    clouds : mapping of str to Recorded
        Observables by which a name with any cloud is known.

    Raises
    ------
    DefinitionError
        On an expression that is not well formed, an input that is not known, has no unit or is no number, a
        dimension that does not fit, or quantities that are made of each other.
    """
    known = {*recorded, *definitions}
    parsed: dict[str, Expression] = {}
    for name, definition in definitions.items():
        try:
            parsed[name] = parse_expression(definition.expression, known)
        except FormulaError as problem:
            raise DefinitionError(name, problem.found, problem.wanted) from None
    settled: dict[str, Derived] = {}
    for name in _in_order(parsed):
        try:
            settled[name] = _settle(name, parsed[name], definitions[name].unit, settled, recorded, clouds)
        except FormulaError as problem:
            raise DefinitionError(name, problem.found, problem.wanted) from None
    return settled


def _settle(
    name: str,
    expression: Expression,
    wanted: str | None,
    settled: Mapping[str, Derived],
    recorded: Mapping[str, Recorded],
    clouds: Mapping[str, Recorded],
) -> Derived:
    units: dict[str, str] = {}
    formulas: dict[str, Formula] = {}
    inputs: dict[Role, list[str]] = {"parameter": [], "observable": []}
    for own in expression.names:
        if own in settled:
            inner = settled[own]
            units[own] = inner.unit
            formulas |= inner.formulas
            inputs["parameter"] += inner.parameters
            inputs["observable"] += inner.observables
            continue
        entry = recorded.get(own) or clouds.get(own.rpartition("[")[0])
        if entry is None:
            raise FormulaError(repr(own), f"a name of this card{_near(own, {*recorded, *settled})}")
        units[own] = _unit_of(own, entry)
        inputs[entry.role].append(own)
    if not expression.names:
        raise FormulaError("no parameter and no observable", "at least one of this card")
    formulas[name] = settle_formula(expression, units, wanted)
    parameters, observables = (tuple(dict.fromkeys(inputs[role])) for role in ("parameter", "observable"))
    return Derived(name, "observable" if observables else "parameter", formulas, parameters, observables)


def _unit_of(name: str, entry: Recorded) -> str:
    if entry.kind in ("text", "truth"):
        raise FormulaError(f"{name}, a {entry.kind}", "numbers")
    if entry.unit is None:
        wanted = f'its unit in the card, [{entry.role}s.{name}] unit = "…" ("1" for a pure number)'
        raise FormulaError(f"{name}, whose unit the card does not say", wanted)
    return entry.unit


def _near(name: str, names: Iterable[str]) -> str:
    near = difflib.get_close_matches(name, sorted(names), 3)
    hint = f", such as {', '.join(near or sorted(names)[:6])}" if names else "; it has none yet"
    return f"{hint} (the unit is 1 {name})" if not near and _is_unit(name) else hint


def _is_unit(name: str) -> bool:
    from nightfold.units import parse_unit

    try:
        return name.isalpha() and parse_unit(name) == name
    except UnitError:
        return False


def _in_order(parsed: Mapping[str, Expression]) -> list[str]:
    """Return the names, each behind those that it is made of."""
    done: list[str] = []
    for name in parsed:
        _visit(name, parsed, done, [])
    return done


def _visit(name: str, parsed: Mapping[str, Expression], done: list[str], path: list[str]) -> None:
    if name in done:
        return
    if name in path:
        circle = " -> ".join([*path[path.index(name) :], name])
        raise DefinitionError(name, f"a circle: {circle}", "quantities that are not made of themselves")
    if len(path) > DEEPEST:
        raise DefinitionError(name, f"more than {DEEPEST} quantities made of each other", "fewer")
    for own in parsed[name].names:
        if own in parsed:
            _visit(own, parsed, done, [*path, name])
    done.append(name)


DEEPEST = 50

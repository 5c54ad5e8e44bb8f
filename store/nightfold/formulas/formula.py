"""One expression: its inputs, its unit, and what is to be computed of plain numbers.

The unit of every part is found with pint when the expression is settled. What is computed afterwards are plain numbers,
with the factors between units written into the expression: ``2*aom_frequency - 160 kHz`` of MHz becomes
``minus((2.0 * x0), (160.0 * 0.001))``.
"""

from __future__ import annotations

import ast
import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass

from nightfold.errors import FormulaError, UnitError
from nightfold.formulas.tokens import Tokens, tokenize

DEEPEST = 60
LARGEST_POWER = 30
_ARGUMENTS = {"arctan2": (2, 2), "min": (2, 20), "max": (2, 20)}
_OPERATORS = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/", ast.Pow: "**"}
_SUMS = {"+": "plus", "-": "minus"}
_ANGLE = "rad"


@dataclass(frozen=True, slots=True)
class Expression:
    """An expression that is well formed; its names and units are not checked yet.

    Attributes
    ----------
    text : str
        As written.
    names : tuple of str
        Its inputs, in the order in which they stand.
    literals : tuple of (float, str)
        Its numbers with a unit.
    tree : ast.expr
        With placeholders ``x0`` for the names, ``q0`` for the literals.
    """

    text: str
    names: tuple[str, ...]
    literals: tuple[tuple[float, str], ...]
    tree: ast.expr


@dataclass(frozen=True, slots=True)
class Formula:
    """What is computed of plain numbers, each in the unit its input is stored in.

    Attributes
    ----------
    names : tuple of str
        Inputs: ``x0`` is the first.
    python : str
        A plain expression of ``x0``, ``x1`` …, numbers, ``* /``, `plus`, `minus`, `power` and the functions of the
        language.
    unit : str
        Of the result.
    """

    names: tuple[str, ...]
    python: str
    unit: str


def parse_expression(text: str, known: Collection[str] = ()) -> Expression:
    """Return an expression that is well formed.

    Parameters
    ----------
    known : collection of str
        Names of parameters, observables and derived quantities.

    Raises
    ------
    FormulaError
        If it is not.
    """
    tokens = tokenize(text, known)
    try:
        tree = ast.parse(" ".join(part for part, _ in tokens.parts), mode="eval").body
    except (SyntaxError, RecursionError, MemoryError) as problem:
        raise _broken(tokens, problem) from None
    _check_forms(tree, 0)
    return Expression(text, tuple(tokens.names), tuple(tokens.literals), tree)


def _broken(tokens: Tokens, problem: Exception) -> FormulaError:
    """Return the error for tokens that make no expression, with the place in the user's words."""
    parts = [part for part, _ in tokens.parts]
    opened = parts.count("(") - parts.count(")")
    if not isinstance(problem, SyntaxError) or problem.offset is None or "nested" in problem.msg:
        return FormulaError("brackets too deep", f"at most {DEEPEST} levels")
    if opened:
        return FormulaError(f"{abs(opened)} '{'(' if opened > 0 else ')'}' too many", "one ')' for each '('")
    if parts[-1] in {*_OPERATORS.values(), ","}:
        return FormulaError(f"'{parts[-1]}' at the end", "a name or a number behind it")
    end = 0
    for number, (part, text) in enumerate(tokens.parts):
        end += len(part) + 1
        if end >= problem.offset:
            before = tokens.parts[number - 1][1] if number else ""
            return FormulaError(
                f"'{f'{before} {text}'.strip()}'", "names and numbers with one operator between them"
            )
    return FormulaError("no expression", "one such as 2*aom_frequency - 160 MHz")


def _check_forms(node: ast.expr, depth: int) -> None:
    """Refuse every form but those of the language; tokens let few others through."""
    if depth > DEEPEST:
        raise FormulaError("brackets or signs too deep", f"at most {DEEPEST} levels")
    match node:
        case ast.BinOp() if type(node.op) in _OPERATORS:
            inner = [node.left, node.right]
        case ast.UnaryOp(op=ast.USub() | ast.UAdd()):
            inner = [node.operand]
        case ast.Call(func=ast.Name(id=name), keywords=[]):
            few, many = _ARGUMENTS.get(name, (1, 1))
            if not few <= len(node.args) <= many:
                wanted = f"{few} of them" if few == many else f"{few} or more"
                raise FormulaError(f"{name} of {len(node.args)} arguments", wanted)
            inner = node.args
        case ast.Name() | ast.Constant(value=float()):
            inner = []
        case ast.Tuple():
            raise FormulaError("a comma", "it only between the arguments of arctan2, min and max")
        case _:
            raise FormulaError("an odd form", "names, numbers with units, + - * / ** and functions")
    for each in inner:
        _check_forms(each, depth + 1)


def settle_formula(expression: Expression, units: Mapping[str, str], wanted: str | None = None) -> Formula:
    """Return what is to be computed.

    Parameters
    ----------
    units : mapping of str to str
        Unit of every input.
    wanted : str, optional
        Unit of the result; default the one that the expression has.

    Raises
    ------
    FormulaError
        If the dimensions do not fit.
    """
    part = _Units(expression, units).of(expression.tree)
    unit = _natural(part.unit) if wanted is None else wanted
    if _is_offset(unit):
        raise FormulaError(f"the unit {unit}", "one without an offset, such as K")
    try:
        return Formula(expression.names, part.stated_in(unit), unit)
    except UnitError as problem:
        raise FormulaError(
            f"an expression in {_spelled(part.unit)}", f"one in {_spelled(unit)} ({problem})"
        ) from None


def _spelled(unit: str) -> str:
    return unit or "pure numbers"


def _is_offset(unit: str) -> bool:
    from nightfold.units import absolute_unit

    return absolute_unit(unit) != unit


def _natural(unit: str) -> str:
    """Return the unit of a result for which none is wanted: what cancels to a pure number is one."""
    from nightfold.units import conversion

    try:
        return unit if conversion(unit, "").factor == 1.0 else ""
    except UnitError:
        return unit


@dataclass(frozen=True, slots=True)
class _Part:
    """A part of an expression in Python, its unit, how it was written, and its value if it is constant."""

    python: str
    unit: str
    text: str
    constant: float | None = None

    def stated_in(self, unit: str) -> str:
        """Return the Python of this part in another unit.

        Raises
        ------
        UnitError
            If it does not convert.
        """
        from nightfold.units import conversion

        factor = conversion(self.unit, unit).factor
        return self.python if factor == 1.0 else f"({self.python} * {factor!r})"


class _Units:
    """Walks through an expression and finds the unit of every part."""

    def __init__(self, expression: Expression, units: Mapping[str, str]) -> None:
        self._expression, self._units = expression, units

    def of(self, node: ast.expr) -> _Part:
        """Return one part."""
        match node:
            case ast.Constant(value=float(value)):
                return _Part(repr(value), "", f"{value:g}", value)
            case ast.Name(id=name) if name[0] == "x":
                own = self._expression.names[int(name[1:])]
                return _absolute(_Part(name, self._units[own], own))
            case ast.Name(id=name):
                value, unit = self._expression.literals[int(name[1:])]
                return _absolute(_Part(repr(value), unit, f"{value:g} {unit}"))
            case ast.UnaryOp():
                return self._signed(node)
            case ast.BinOp():
                return self._joined(node)
            case ast.Call(func=ast.Name(id=name)):
                return self._called(name, [self.of(each) for each in node.args])
        raise AssertionError(node)  # _check_forms lets nothing else through

    def _signed(self, node: ast.UnaryOp) -> _Part:
        part = self.of(node.operand)
        if isinstance(node.op, ast.UAdd):
            return part
        constant = None if part.constant is None else -part.constant
        return _Part(f"(-{part.python})", part.unit, f"-{part.text}", constant)

    def _joined(self, node: ast.BinOp) -> _Part:
        left, right = self.of(node.left), self.of(node.right)
        sign = _OPERATORS[type(node.op)]
        text = f"{left.text} {sign} {right.text}"
        if sign in "+-":
            python = f"{_SUMS[sign]}({left.python}, {_same(left, right, sign)})"
            return _Part(python, left.unit, text, _constant(sign, left, right))
        if sign == "**":
            return self._power(left, right)
        from nightfold.units import combine_units

        unit = combine_units(left.unit, right.unit, 1 if sign == "*" else -1)
        return _Part(f"({left.python} {sign} {right.python})", unit, text, _constant(sign, left, right))

    def _power(self, base: _Part, exponent: _Part) -> _Part:
        text = f"{base.text} ** {exponent.text}"
        power = exponent.constant
        if power is not None and not abs(power) <= LARGEST_POWER:
            raise FormulaError(f"the power {power:g}", f"one from -{LARGEST_POWER} to {LARGEST_POWER}")
        if power is None:
            python = f"power({_pure(base, text)}, {_pure(exponent, text)})"
            return _Part(python, "", text)
        from nightfold.units import combine_units

        constant = _constant("**", base, exponent)
        return _Part(
            f"power({base.python}, {exponent.python})", combine_units("", base.unit, power), text, constant
        )

    def _called(self, name: str, parts: list[_Part]) -> _Part:
        first = parts[0]
        text = f"{name}({', '.join(part.text for part in parts)})"
        unit = {"abs": first.unit, "min": first.unit, "max": first.unit}.get(name, "")
        if name in ("min", "max", "arctan2"):
            arguments = [first.python, *(_same(first, part, ",", name) for part in parts[1:])]
        elif name in ("abs", "sqrt"):
            arguments = [first.python]
        elif name in ("sin", "cos", "tan"):
            arguments = [_angle(first, text)]
        else:
            arguments = [_pure(first, text)]
        if name == "sqrt":
            from nightfold.units import combine_units

            unit = combine_units("", first.unit, 0.5)
        elif name.startswith("arc"):
            unit = _ANGLE
        return _Part(f"{name}({', '.join(arguments)})", unit, text)


def _absolute(part: _Part) -> _Part:
    """Return a part with an offset unit, such as degC, on the absolute scale."""
    from nightfold.units import absolute_unit, conversion

    unit = absolute_unit(part.unit)
    if unit == part.unit:
        return part
    rule = conversion(part.unit, unit)
    if not math.isfinite(rule.factor):
        raise FormulaError(f"{part.text} ({part.unit})", "no logarithmic unit in an expression")
    return _Part(f"({part.python} * {rule.factor!r} + {rule.value(0.0)!r})", unit, part.text)


def _same(one: _Part, other: _Part, sign: str, function: str = "") -> str:
    """Return the second part in the unit of the first; they are joined by a sign, or arguments of a function."""
    try:
        return other.stated_in(one.unit)
    except UnitError as problem:
        left, right = (f"{part.text} ({_spelled(part.unit)})" for part in (one, other))
        found = f"{function}({left}, {right})" if function else f"{left} {sign} {right}"
        raise FormulaError(found, f"units of one kind ({problem})") from None


def _pure(part: _Part, within: str) -> str:
    try:
        return part.stated_in("")
    except UnitError:
        raise FormulaError(f"{within} of {part.text} ({part.unit})", "a pure number there") from None


def _angle(part: _Part, within: str) -> str:
    """Return an angle in radians; a pure number is one."""
    try:
        return part.stated_in(_ANGLE)
    except UnitError:
        return _pure(part, within)


def _constant(sign: str, left: _Part, right: _Part) -> float | None:
    """Return the value of two constants joined, None where one is not constant."""
    if left.constant is None or right.constant is None:
        return None
    try:
        return _JOIN[sign](left.constant, right.constant)
    except (ArithmeticError, ValueError):
        return math.nan


_JOIN = {
    "+": float.__add__,
    "-": float.__sub__,
    "*": float.__mul__,
    "/": float.__truediv__,
    "**": math.pow,
}

"""An expression cut into tokens and made a plain Python expression of placeholders.

Nothing of the text itself reaches Python: names become ``x0``, ``x1`` …, literals with a unit ``q0``, ``q1`` …, and
what is no token of the little language is refused here.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Collection
from dataclasses import dataclass, field

from nightfold.errors import FormulaError, UnitError
from nightfold.records import clean_name

FUNCTIONS = (
    *("sqrt", "exp", "log", "log10", "sin", "cos", "tan", "arctan", "arctan2", "abs", "min", "max"),
)  # fmt: skip
CONSTANTS = {"pi": math.pi}
LONGEST = 1000

_WORD = r"[^\W\d]\w*"
_SPACE = re.compile(r"\s*")
_QUOTED = re.compile(r"`([^`]*)`")
_NUMBER = re.compile(r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")
_UNIT = re.compile(rf"\s*((?:1\s*/\s*)?{_WORD})(?![\w(\[.#])")
_MORE_UNIT = re.compile(rf"\s*[*/]\s*({_WORD})(?!\s*[(\[.#\w])")
_NAME = re.compile(rf"{_WORD}(?:#\d+)?(?:\.{_WORD}(?:#\d+)?)*(?:\[[^\[\]`]+\])?")
_OPERATOR = re.compile(r"\*\*|[-+*/(),]")
_CALL = re.compile(r"\s*\(")
_HINTS = {
    "^": "** for a power",
    "'": "names without quotes; odd ones in backquotes: `hold time`",
    '"': "names without quotes; odd ones in backquotes: `hold time`",
    "=": "what stands on the right of the sign alone",
    "`": "a second backquote behind the name",
    "\N{MINUS SIGN}": "the sign - of the keyboard",
    "\N{EN DASH}": "the sign - of the keyboard",
    "\N{MULTIPLICATION SIGN}": "the sign * of the keyboard",
    "\N{MIDDLE DOT}": "the sign * of the keyboard",
    "[": "a cloud directly behind its observable: atom_number[up]",
}


@dataclass(slots=True)
class Tokens:
    """An expression in plain Python, and what its placeholders stand for.

    Attributes
    ----------
    parts : list of (str, str)
        Piece of Python and the piece of the expression that it stands for.
    names : list of str
        Inputs: ``x0`` is the first.
    literals : list of (float, str)
        Numbers with their unit: ``q0`` is the first.
    """

    parts: list[tuple[str, str]] = field(default_factory=list)
    names: list[str] = field(default_factory=list)
    literals: list[tuple[float, str]] = field(default_factory=list)

    def name(self, name: str, text: str) -> None:
        """Add an input."""
        if name not in self.names:
            self.names.append(name)
        self.parts.append((f"x{self.names.index(name)}", text))

    def literal(self, value: float, unit: str, text: str) -> None:
        """Add a number with a unit."""
        self.parts.append((f"q{len(self.literals)}", text))
        self.literals.append((value, unit))


def tokenize(text: str, known: Collection[str]) -> Tokens:
    """Return the tokens of an expression.

    Parameters
    ----------
    known : collection of str
        Names of the card: a word behind ``160 MHz/`` that is among them is no part of the unit.

    Raises
    ------
    FormulaError
        If something is no token of the language.
    """
    if len(text) > LONGEST:
        raise FormulaError(f"{len(text)} characters", f"at most {LONGEST}; split it into several quantities")
    tokens = Tokens()
    place = _skip(text, 0)
    while place < len(text):
        place = _skip(text, _read_token(text, place, tokens, known))
    if not tokens.parts:
        raise FormulaError("nothing", "an expression, such as 2*aom_frequency - 160 MHz")
    return tokens


def _skip(text: str, place: int) -> int:
    match = _SPACE.match(text, place)
    return match.end() if match else place


def _read_token(text: str, place: int, tokens: Tokens, known: Collection[str]) -> int:
    """Read the token that begins at a place and return where it ends."""
    readers: tuple[tuple[re.Pattern[str], Callable[..., int]], ...] = (
        (_QUOTED, _read_quoted), (_NUMBER, _read_number), (_NAME, _read_name), (_OPERATOR, _read_operator),
    )  # fmt: skip
    for pattern, read in readers:
        if match := pattern.match(text, place):
            return read(text, match, tokens, known)
    sign = text[place]
    raise FormulaError(repr(sign), _HINTS.get(sign, "names, numbers with units, + - * / ** and functions"))


def _read_quoted(text: str, match: re.Match[str], tokens: Tokens, known: Collection[str]) -> int:
    tokens.name(_cleaned(match[1]), match[0])
    return match.end()


def _read_operator(text: str, match: re.Match[str], tokens: Tokens, known: Collection[str]) -> int:
    tokens.parts.append((match[0], match[0]))
    return match.end()


def _read_name(text: str, match: re.Match[str], tokens: Tokens, known: Collection[str]) -> int:
    word = match[0]
    if _CALL.match(text, match.end()):
        if word not in FUNCTIONS:
            raise FormulaError(f"{word}(…)", f"one of the functions {', '.join(FUNCTIONS)}")
        tokens.parts.append((word, word))
        return match.end()
    name = _cleaned(word)
    if name == "\N{GREEK SMALL LETTER PI}" and name not in known:
        raise FormulaError(f"the name {word!r}", "pi, written so, for the number")
    if name in CONSTANTS and name not in known:
        tokens.parts.append((repr(CONSTANTS[name]), word))
    else:
        tokens.name(name, word)
    return match.end()


def _cleaned(word: str) -> str:
    try:
        return clean_name(word)
    except ValueError as problem:
        raise FormulaError(f"the name {word!r}", str(problem)) from None


def _read_number(text: str, match: re.Match[str], tokens: Tokens, known: Collection[str]) -> int:
    value = float(match[0])
    if not math.isfinite(value):
        raise FormulaError(match[0], "a number below 1e308")
    unit = _UNIT.match(text, match.end())
    if unit is None:
        tokens.parts.append((repr(value), match[0]))
        return match.end()
    end = unit.end()
    while (more := _MORE_UNIT.match(text, end)) and more[1] not in known and more[1] not in CONSTANTS:
        end = more.end()
    written = text[match.end() : end].strip()
    if text[_skip(text, end) :].startswith("**"):
        wanted = (
            f"brackets that say what is raised: ({match[0]} {written})**2, or {match[0]} * (1 {written})**2"
        )
        raise FormulaError(f"a power directly behind the unit {written}", wanted)
    tokens.literal(value, _unit_of(written, known), text[match.start() : end])
    return end


def _unit_of(written: str, known: Collection[str]) -> str:
    from nightfold.units import parse_unit

    try:
        return parse_unit(written)
    except UnitError:
        wanted = "a unit that is known behind a number, such as 160 MHz"
        if written in known:
            wanted = f"an operator before the name: * {written}"
        raise FormulaError(repr(written), wanted) from None

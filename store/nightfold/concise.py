"""Numbers with their uncertainty, as people write them: ``33.612(14)``, ``1.234(56)e5``.

The standard uncertainty is given to two significant digits and the value to the same decimal place, as
GUM 7.2.6 advises for numbers that others will compute with. An exponent is used where the two digits would
otherwise stand left of the decimal point (``1.210(31)e5``, not ``121000(3100)``) or far right of it.

References
----------
JCGM 100:2008 (GUM), 7.2.2 example 2 and 7.2.6.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Context, Decimal
from typing import Literal

_CONTEXT = Context(prec=800, rounding=ROUND_HALF_EVEN)
_NEGLIGIBLE = 1e-16  # a stderr below this share of the value is lost in a double
_ASYMMETRIC = 1.10
_UNDETERMINED = 1e3  # one side of an interval longer than the other by this: no digits worth reading
_LONGEST = 14
NOT_DETERMINED = "not determined"
_PLAIN_EXPONENTS = range(-3, 6)
_PATTERN = re.compile(
    r"(?P<value>[+-]?\d+(?:\.\d+)?)\((?P<stderr>\d+(?:\.\d+)?)\)(?:e(?P<exponent>[+-]?\d+))?"
)


@dataclass(frozen=True, slots=True)
class Scale:
    """The decimal place and the power of ten that one line of numbers shares.

    Attributes
    ----------
    exponent : int
        Power of ten taken out of every number; 0 for none.
    decimals : int
        Digits after the decimal point of what is left.
    """

    exponent: int
    decimals: int

    @property
    def suffix(self) -> str:
        """Return the exponent as written behind a number, empty for none."""
        return f"e{self.exponent}" if self.exponent else ""

    def digits(self, number: float) -> str:
        """Return the number without the exponent, rounded to the scale's place."""
        scaled = _rounded(_CONTEXT.scaleb(Decimal(repr(float(number))), -self.exponent), self.decimals)
        return f"{scaled:f}" if scaled else f"{abs(scaled):f}"

    def text(self, number: float) -> str:
        """Return the number with the exponent, or ``nan``, ``inf``, ``-inf``."""
        return self.digits(number) + self.suffix if math.isfinite(number) else f"{number:g}"


def scale_of(value: float, stderr: float) -> Scale | None:
    """Return the place at which a value with this stderr is written; None where it decides nothing."""
    if not (math.isfinite(value) and math.isfinite(stderr)) or stderr <= 0:
        return None
    if stderr < abs(value) * _NEGLIGIBLE:
        return None
    quantum = _exponent(_significant(Decimal(repr(float(stderr))), 2)) - 1
    leading = max(_exponent(_rounded(Decimal(repr(float(value))), -quantum)), quantum + 1)
    exponent = leading if quantum > 0 or leading < -3 else 0
    return Scale(exponent, exponent - quantum if quantum < exponent else max(0, -quantum))


def concise(value: float, stderr: float) -> str:
    """Return ``33.612(14)``; without a usable stderr the value alone.

    Parameters
    ----------
    value, stderr : float
        A number and its standard uncertainty, in the same unit.

    Examples
    --------
    >>> concise(33.61234, 0.0137)
    '33.612(14)'
    >>> concise(-121034.0, 3120.0)
    '-1.210(31)e5'
    >>> concise(33.5, 0.0)
    '33.5'
    """
    scale = scale_of(value, stderr)
    if scale is None:
        return plain(value)
    return f"{scale.digits(value)}({_bracket(scale, stderr)}){scale.suffix}"


def in_parts(value: float, stderr: float, other: float) -> str:
    """Return ``33.612(14)(7)``: a value with two uncertainties of different kinds, to the same decimal place.

    Parameters
    ----------
    value, stderr, other : float
        A number, its statistical standard uncertainty, and that of another kind; the larger has two digits.

    Examples
    --------
    >>> in_parts(61.3617, 0.0201, 0.0068)
    '61.362(20)(7)'
    >>> in_parts(121034.0, 3120.0, 410.0)
    '1.210(31)(4)e5'
    """
    scale = scale_of(value, max(stderr, other)) if math.isfinite(stderr) and math.isfinite(other) else None
    if scale is None:
        return plain(value)
    return f"{scale.digits(value)}({_bracket(scale, stderr)})({_bracket(scale, other)}){scale.suffix}"


def _bracket(scale: Scale, stderr: float) -> str:
    """Return an uncertainty as it stands in brackets: in units of the last digit of the value."""
    digits = scale.digits(stderr)
    if "." in digits and float(digits) < 1:
        digits = digits.replace(".", "").lstrip("0")
    return digits or "0"


def asymmetric(value: float, stderr: float, low: float, high: float) -> str:
    """Return the value with its 68 % interval: ``33.612(14)``, or ``33.612 +0.018/-0.011`` where lopsided.

    The two-sided form is used where one side is longer than the other by more than a tenth; beyond a thousandfold,
    and where neither side ends, it is ``not determined``.
    """
    up, down = high - value, value - low
    if _open_side(low, high, value) is not None:
        return NOT_DETERMINED
    if not (math.isfinite(up) and math.isfinite(down)) or up <= 0 or down <= 0:
        return concise(value, stderr)
    if max(up, down) <= _ASYMMETRIC * min(up, down):
        return concise(value, stderr)
    scale = scale_of(value, min(up, down))
    if scale is None:
        return concise(value, stderr)
    body = f"{scale.digits(value)} +{scale.digits(up)}/-{scale.digits(down)}"
    return f"({body}){scale.suffix}" if scale.suffix else body


def interval(low: float, high: float, value: float, stderr: float) -> str:
    """Return ``33.584 … 33.640``, written to the same place as the value they belong to.

    Where only one end means something it is ``above 3.1e3`` or ``below 0.25``, where none does ``not determined``.
    """
    side = _open_side(low, high, value)
    if side == "both":
        return NOT_DETERMINED
    if side is not None:
        return f"above {_one_end(low, value)}" if side == "up" else f"below {_one_end(high, value)}"
    scale = scale_of(value, stderr)
    return " … ".join(_end(end, scale) for end in (low, high))


def _open_side(low: float, high: float, value: float) -> Literal["up", "down", "both"] | None:
    """Return the side to which an interval has no end worth reading, None where both ends are good.

    An end a thousand times farther off than the other one says nothing, and neither does the zero below a number
    that cannot be negative, nor one a thousand times below or above such a number.
    """
    up, down = high - value, value - low
    if math.isnan(low) or math.isnan(high):
        return "both"
    no_up = not math.isfinite(up) or up > _UNDETERMINED * down > 0
    no_down = not math.isfinite(down) or down > _UNDETERMINED * up > 0
    if no_up and not no_down:
        vanishing = math.isfinite(up) and 0 < low < value / _UNDETERMINED
        no_down = low == 0 or vanishing
    if no_up or no_down:
        return "both" if no_up and no_down else "up" if no_up else "down"
    return None


def _one_end(end: float, value: float) -> str:
    """Return the one end that is known, in two digits, or more where it is close to the value."""
    closeness = abs(end) / abs(value - end) if math.isfinite(value) and value != end else 1.0
    digits = 2 + max(0, math.ceil(math.log10(closeness))) if closeness > 0 else 2
    return rounded(end, min(digits, 12))


def _end(end: float, scale: Scale | None) -> str:
    text = scale.text(end) if scale else plain(end)
    if scale is None or not math.isfinite(end):
        return text
    lost = end != 0 and not float(scale.digits(end))
    return text if len(text) <= _LONGEST and not lost else plain(float(f"{end:.2g}"))


def plain(number: float, digits: int = 12) -> str:
    """Return a number without uncertainty in at most so many digits, ``nan`` for none."""
    if not math.isfinite(number):
        return f"{number:g}"
    if number == int(number) and abs(number) < 10 ** min(digits, 15):
        return str(int(number))
    text = f"{number:.{digits}g}"
    mantissa, _, exponent = text.partition("e")
    return f"{mantissa}e{int(exponent)}" if exponent else text


def rounded(number: float, digits: int = 2) -> str:
    """Return a number in so many digits: ``0.25``, ``3.1e3``."""
    if not math.isfinite(number):
        return f"{number:g}"
    near = float(f"{number:.{digits}g}")
    if 1e-3 <= abs(near) < 1e3 or not near:
        return plain(near)
    mantissa, _, exponent = f"{near:.{digits - 1}e}".partition("e")
    return f"{mantissa}e{int(exponent)}"


def short(number: float) -> str:
    """Return a number for a list, where four or five digits are plenty."""
    if not math.isfinite(number) or number == 0:
        return plain(number)
    if math.floor(math.log10(abs(number))) in _PLAIN_EXPONENTS:
        return plain(float(f"{number:.5g}"))
    return plain(number, 4)


def parse_concise(text: str) -> tuple[float, float]:
    """Return value and stderr of a number in concise notation.

    Raises
    ------
    ValueError
        If the text is not in concise notation.
    """
    match = _PATTERN.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"not a number in concise notation: {text!r}")
    value, stderr = Decimal(match["value"]), Decimal(match["stderr"])
    if "." not in match["stderr"]:
        stderr = stderr.scaleb(min(0, _places(value)))
    exponent = int(match["exponent"] or 0)
    return float(value.scaleb(exponent)), float(stderr.scaleb(exponent))


def _significant(number: Decimal, digits: int) -> Decimal:
    """Return the number rounded to so many significant digits."""
    return Context(prec=digits, rounding=ROUND_HALF_EVEN).plus(number)


def _rounded(number: Decimal, decimals: int) -> Decimal:
    """Return the number rounded at a decimal place (negative: left of the point)."""
    return number.quantize(Decimal(1).scaleb(-decimals), context=_CONTEXT)


def _exponent(number: Decimal) -> int:
    """Return the power of ten of the leading digit, a very low one for zero."""
    return number.adjusted() if number else -10_000


def _places(number: Decimal) -> int:
    """Return the exponent of the last written digit."""
    exponent = number.as_tuple().exponent
    return exponent if isinstance(exponent, int) else 0

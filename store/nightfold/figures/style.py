"""How figures look: colours and shapes that survive black-and-white print and colour blindness, safe text.

Colours: M. Okabe and K. Ito, *Color Universal Design* (2008), https://jfly.uni-koeln.de/color/; what matters
differs in shape or line as well.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import matplotlib as mpl

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.axis import Axis
    from matplotlib.figure import Figure

INK, FAINT = "#000000", "#8C8C8C"
BLUE, VERMILLION = "#0072B2", "#D55E00"
PALE_BLUE = "#C4DFEE"
WIDTH = 7.0
"""Width of every figure, in inches: two columns of a journal."""
LINE = 0.148
"""Height of a line of small text, in inches."""
EDGE = 0.12

_LATE = 5e3
"""Ticks get an offset where the values are larger than their span by this."""

_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 8.0,
    "text.parse_math": False,
    "text.usetex": False,
    "axes.unicode_minus": True,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.frameon": False,
    "figure.dpi": 100.0,
    "savefig.dpi": 200.0,
    "svg.fonttype": "none",
    "svg.hashsalt": "nightfold",
    "pdf.fonttype": 42,
}


@contextmanager
def style() -> Iterator[None]:
    """Draw with our settings, whatever those of the user are, and leave the user's as they were."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_STYLE)
        yield


def safe(text: object) -> str:
    """Return a text with control characters and line breaks as escapes; ``$`` and ``_`` are plain characters here."""
    return "".join(
        sign if sign.isprintable() else sign.encode("unicode_escape", "replace").decode("ascii")
        for sign in str(text)
    )


def lines_of(text: object, width: int) -> list[str]:
    """Return a text in lines of at most so many characters."""
    return textwrap.wrap(safe(text), width, break_long_words=True) or [""]


def with_unit(name: str, unit: str) -> str:
    """Return the title of an axis: ``coil_current (A)``."""
    return f"{safe(name)} ({safe(unit)})" if unit else safe(name)


def write_lines(
    figure: Figure, lines: Sequence[tuple[str, dict[str, Any]]], left: float, top: float
) -> float:
    """Write lines below each other, from a place in inches from the left and the top; return where they end."""
    width, height = figure.get_size_inches()
    for text, looks in lines:
        figure.text(left / width, 1 - top / height, text, va="top", ha="left", **looks)
        top += LINE * float(looks.get("fontsize", 8.0)) / 8.0
    return top


def label_axis(axis: Axis, name: str, unit: str) -> None:
    """Name an axis of numbers, with the power of ten and the offset of its ticks in the name, not in a corner."""
    low, high = sorted(axis.get_view_interval())
    offset = _offset(low, high)
    largest = max(abs(low - offset), abs(high - offset))
    power = math.floor(math.log10(largest)) if largest else 0
    power = 0 if -3 < power < 4 else power
    ticks = [at for at in axis.get_majorticklocs().tolist() if low <= at <= high]
    scaled = [(at - offset) / 10.0**power for at in ticks]
    decimals = _decimals(scaled)
    axis.set_ticks(ticks, [f"{number + 0.0:.{decimals}f}".replace("-", "\u2212") for number in scaled])
    axis.set_view_interval(low, high, ignore=True)
    origin = f" {'+' if offset < 0 else '-'} {_number(abs(offset))}" if offset else ""
    axis.set_label_text(with_unit(name + origin, f"{f'1e{power}' if power else ''} {unit}".strip()))


def _offset(low: float, high: float) -> float:
    """Return a round number near values that differ in late digits only, else zero."""
    span = high - low
    if not span or max(abs(low), abs(high)) < _LATE * span:
        return 0.0
    step = 10.0 ** math.ceil(math.log10(span))
    return math.floor(low / step) * step


def _decimals(numbers: Sequence[float]) -> int:
    """Return how many digits behind the point it takes to write evenly spaced numbers."""
    step = abs(numbers[1] - numbers[0]) if len(numbers) > 1 else abs(numbers[0]) if numbers else 1.0
    near = [n for n in range(12) if all(abs(round(x, n) - x) <= 1e-3 * step for x in numbers)]
    return near[0] if near else 12


def _number(number: float) -> str:
    """Return a number with all its digits, with an exponent where it is large or small."""
    if 1e-3 <= number < 1e6:
        return f"{number:.15g}"
    mantissa, _, exponent = f"{number:.14e}".partition("e")
    return f"{mantissa.rstrip('0').rstrip('.')}e{int(exponent)}"


def plain_axes(axes: Axes) -> None:
    """Let the marks at the ends of the axes stand out of the frame."""
    axes.tick_params(direction="out", length=3.0, pad=2.5)

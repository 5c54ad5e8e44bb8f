"""Round numbers along an axis, and their labels."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

_LONGEST = 8


@dataclass(frozen=True, slots=True)
class Ticks:
    """Tick positions of one axis.

    Attributes
    ----------
    positions : tuple of float
        Where the ticks stand, rising.
    labels : tuple of str
        What is written there, after `offset` is taken away and `exponent` taken out.
    offset : str
        The number taken away from every label, as text; empty for none.
    exponent : int
        The power of ten taken out of every label.
    """

    positions: tuple[float, ...]
    labels: tuple[str, ...]
    offset: str
    exponent: int

    def title(self, name: str, unit: str) -> str:
        """Return the axis title, which says what was done to the labels: ``atom_number (1e3 atoms)``."""
        scale = " ".join(part for part in (f"1e{self.exponent}" if self.exponent else "", unit) if part)
        shown = f"{name} ({scale})" if scale else name
        return f"{shown}, counted from {self.offset} {unit}".rstrip() if self.offset else shown


def ticks_between(low: float, high: float, most: int) -> Ticks:
    """Return at most so many ticks at round numbers between two finite ends, low < high."""
    step = next(step for step in _steps((high - low) / (most + 1)) if _count(low, high, step) <= most)
    first, last = _first(low, step), _last(high, step)
    positions = tuple(index * step for index in range(first, last + 1))
    largest = max((abs(position) for position in positions), default=0.0)
    exponent = _engineering(largest)
    offset = 0
    if _width(largest, step, exponent) > _LONGEST:
        offset, exponent = first, _engineering((last - first) * step)
    decimals = max(0, exponent - math.floor(math.log10(step) + 1e-9))
    labels = tuple(_label((index - offset) * step, exponent, decimals) for index in range(first, last + 1))
    return Ticks(positions, labels, _exact(offset, step) if offset else "", exponent)


def _steps(least: float) -> Iterator[float]:
    """Yield 1, 2, 5 times powers of ten, rising, from just below the given step."""
    power = math.floor(math.log10(least))
    while True:
        yield from (factor * 10.0**power for factor in (1.0, 2.0, 5.0))
        power += 1


def _first(low: float, step: float) -> int:
    """Return the number of the first tick that is not below the low end."""
    return math.ceil(low / step - 1e-9)


def _last(high: float, step: float) -> int:
    """Return the number of the last tick that is not above the high end."""
    return math.floor(high / step + 1e-9)


def _count(low: float, high: float, step: float) -> int:
    """Return how many ticks lie between the ends."""
    return _last(high, step) - _first(low, step) + 1


def _engineering(largest: float) -> int:
    """Return the multiple of three to take out of numbers up to this size; 0 where they read well."""
    if largest <= 0 or 1e-2 <= largest < 1e5:
        return 0
    return 3 * math.floor(math.log10(largest) / 3)


def _width(largest: float, step: float, exponent: int) -> int:
    """Return how many digits the longest label would need."""
    digits = math.floor(math.log10(largest)) - exponent + 1 if largest > 0 else 1
    return max(1, digits) + max(0, exponent - math.floor(math.log10(step) + 1e-9))


def _label(number: float, exponent: int, decimals: int) -> str:
    """Return one label, never ``-0``."""
    text = f"{number / 10.0**exponent:.{decimals}f}"
    return text.lstrip("-") if float(text) == 0 else text


def _exact(index: int, step: float) -> str:
    """Return index * step in full, without an exponent."""
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    return f"{index * step:.{decimals}f}"

"""Units: read, compared and converted with pint, which is loaded when first needed.

Beyond pint's own registry: 1 G = 1e-4 T (SI Brochure, 9th edition, table 8, states the correspondence),
``atoms`` and ``OD`` (optical density) are dimensionless counts. An angle is not a pure number here: ``rad/s`` and
``Hz`` differ by 2 pi and do not convert silently.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Any

from nightfold.errors import UnitError

if TYPE_CHECKING:
    from pint import UnitRegistry

_DEFINITIONS = (
    "field_gauss = 1e-4 * tesla = G = gauss",
    "atom = [] = _ = atoms",
    "optical_density = [] = OD",
)
_LONGEST = 100
_FAR = 1e6  # a scale is told from two numbers so far apart that their difference keeps its digits


@dataclass(frozen=True, slots=True)
class Conversion:
    """How numbers of one unit become numbers of another.

    Attributes
    ----------
    factor : float
        Scale from one to the other; nan for a logarithmic unit.
    linear : bool
        False where an offset or a logarithm is involved.
    source, target : str
        The two units.
    offset : float
        What is added after scaling, as from degF to degC; nan for a logarithmic unit.
    """

    factor: float
    linear: bool
    source: str
    target: str
    offset: float = 0.0

    def value(self, number: float) -> float:
        """Return the number in the target unit, rounded to 15 digits so that 120 ms is 0.12 s."""
        if self.source == self.target:
            return number
        if self.linear:
            return _round(number * self.factor) if self.factor != 1.0 else number
        if self.offset == self.offset:
            return _shifted(number * self.factor, self.offset)
        registry = _registry()
        quantity = registry.Quantity(number, registry.parse_units(self.source))
        return _round(float(quantity.to(registry.parse_units(self.target)).magnitude))

    def stderr(self, number: float) -> float:
        """Return a standard uncertainty in the target unit: scaled, never moved by an offset.

        Raises
        ------
        UnitError
            If the conversion is logarithmic: a standard uncertainty has no fixed size there.
        """
        if self.source == self.target:
            return number
        if self.factor != self.factor:
            raise UnitError(
                f"a standard uncertainty in {self.source} cannot be converted to {self.target}; "
                f"state value and stderr in {self.target}"
            )
        return _round(number * abs(self.factor))


def parse_unit(text: str) -> str:
    """Return the unit as kept: stripped, micro sign made one, known to the registry.

    Raises
    ------
    UnitError
        If the unit is not known.
    """
    unit = text.strip().replace("\u03bc", "\u00b5")
    if unit == "1":
        return ""
    _check(unit)
    return unit


def convertible(source: str, target: str) -> bool:
    """Return whether numbers in one unit can be stated in the other."""
    try:
        conversion(source, target)
    except UnitError:
        return False
    return True


def convert(value: float, unit: str, to: str) -> float:
    """Return a value in another unit.

    Raises
    ------
    UnitError
        If a unit is unknown or the two do not convert.
    """
    return conversion(unit, to).value(value)


def counts_from_zero(unit: str) -> bool:
    """Return whether ratios of numbers in this unit mean something: not in ``degC`` or ``dBm``."""
    if not unit:
        return True
    registry = _registry()
    one, two = (registry.Quantity(number, _check(unit)).to_base_units().magnitude for number in (1.0, 2.0))
    return bool(abs(two - 2 * one) <= 1e-9 * abs(two))


@cache
def conversion(source: str, target: str) -> Conversion:
    """Return how to convert from one unit to another.

    Raises
    ------
    UnitError
        If a unit is unknown, the dimensions differ, or one holds an angle and the other does not.
    """
    if source == target:
        return Conversion(1.0, True, source, target)
    import pint

    registry = _registry()
    one, other = _check(source), _check(target)
    if one.dimensionality != other.dimensionality:
        raise UnitError(f"{source or 'a pure number'} does not convert to {target or 'a pure number'}")
    if _angle(one) != _angle(other):
        raise UnitError(
            f"{source or 'a pure number'} does not convert to {target or 'a pure number'}: "
            "one counts an angle, the other does not (a factor 2 pi); state which is meant"
        )
    try:
        zero, unity, two = (float(registry.Quantity(n, one).to(other).magnitude) for n in (0.0, 1.0, 2.0))
    except (pint.errors.PintError, ValueError, ZeroDivisionError, OverflowError):
        return Conversion(float("nan"), False, source, target, float("nan"))
    factor = unity - zero
    straight = abs((two - unity) - factor) <= 1e-9 * max(abs(two), abs(unity), abs(factor))
    if zero == 0.0 and straight:
        return Conversion(unity, True, source, target)
    if straight:
        far = float(registry.Quantity(_FAR, one).to(other).magnitude)
        return Conversion(_round((far - zero) / _FAR), False, source, target, zero)
    return Conversion(float("nan"), False, source, target, float("nan"))


@cache
def combine_units(one: str, other: str, power: float = 1) -> str:
    """Return the unit of a product: of one unit with a power of another.

    Raises
    ------
    UnitError
        If a unit is unknown, or the product is too long to be one.
    """
    if not other or power == 0:
        return one
    if not one and power == 1:
        return other
    found = _check(one) * _check(other) ** (int(power) if power == int(power) else power)
    text = f"{found:~}"
    return parse_unit("" if text == "dimensionless" else text)


@cache
def absolute_unit(unit: str) -> str:
    """Return the unit in which a unit with an offset, such as degC, can be multiplied; other units as they are.

    Logarithmic units have an absolute one too, but no constant factor to it.
    """
    registry = _registry()
    quantity = registry.Quantity(1.0, _check(unit))
    if quantity._is_multiplicative:
        return unit
    return f"{quantity.to_root_units().units:~}"


def _round(number: float, digits: int = 15) -> float:
    return float(f"{number:.{digits}g}")


def _shifted(scaled: float, offset: float) -> float:
    """Return the sum in 14 digits of its larger part: 294.45 K is 21.3 degC, without dust."""
    if not math.isfinite(scaled):
        return scaled
    larger = max(abs(scaled), abs(offset))
    return round(scaled + offset, 13 - math.floor(math.log10(larger)))


@cache
def _registry() -> UnitRegistry[Any]:
    from pint import UnitRegistry

    registry: UnitRegistry[Any] = UnitRegistry(
        cache_folder=None, autoconvert_offset_to_baseunit=True, on_redefinition="ignore"
    )
    for definition in _DEFINITIONS:
        registry.define(definition)
    return registry


@cache
def _check(unit: str) -> Any:
    if len(unit) > _LONGEST or not unit.isprintable() or set(unit) & set(";:'\"`=,"):
        raise UnitError(f"unit {unit[:30]!r} is not known; examples: A, ms, MHz, nK, G, atoms")
    try:
        parsed = _registry().parse_units(unit)
        parsed.dimensionality  # noqa: B018 (an unknown base raises only here)
    except Exception as problem:  # pint raises half a dozen unrelated classes on odd text
        raise UnitError(f"unit {unit!r} is not known; examples: A, ms, MHz, nK, G, atoms") from problem
    return parsed


def _angle(unit: Any) -> int:
    registry = _registry()
    total = 0
    for name, power in unit._units.items():
        if registry.parse_units(name).dimensionless and name in {
            "radian",
            "degree",
            "turn",
            "arcminute",
            "arcsecond",
        }:
            total += int(power)
    return total

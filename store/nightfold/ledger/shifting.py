"""Corrections that are another value for each shot: by a factor, or by an offset."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nightfold.errors import RecordError, UnitError
from nightfold.ledger.names import MachineNames
from nightfold.records import shorten
from nightfold.settings import Value, number_value
from nightfold.units import conversion, counts_from_zero, parse_unit


@dataclass(frozen=True, slots=True)
class Shift:
    """A factor, or an offset in the unit of the parameter.

    Attributes
    ----------
    sign : {'*=', '+='}
    by : float or int
    """

    sign: str
    by: float | int

    def of(self, old: Value, field: str) -> Value:
        """Return the value that one becomes; NaN and infinities, which have no place to move from, stay.

        Raises
        ------
        RecordError
            If the result is beyond a float.
        """
        number = old.plain
        if isinstance(number, str) or not math.isfinite(number):
            return old
        moved = number * self.by if self.sign == "*=" else number + self.by
        if isinstance(moved, float) and math.isfinite(moved):
            moved = float(f"{moved:.15g}")  # 64.2 times 1.2 is 77.04, without dust
        value = number_value(moved)
        if value is None or value.exact in ("nan", "inf", "-inf"):
            raise RecordError(field, f"{shorten(number)} {self}", "a result that a number can hold")
        return value

    def __str__(self) -> str:
        return f"{self.sign} {shorten(self.by)}"


def read_shift(raw: Any, field: str) -> tuple[Shift, str | None] | None:
    """Return the shift that ``{"times": 1.2}`` or ``{"plus": 0.1, "unit": "A"}`` says, and its unit; None for a value.

    Raises
    ------
    RecordError
        If it is neither one thing nor the other.
    """
    if not isinstance(raw, Mapping) or not raw.keys() & {"times", "plus"}:
        return None
    if raw.keys() == {"times"}:
        sign, number, unit = "*=", raw["times"], None
    elif "plus" in raw and raw.keys() <= {"plus", "unit"}:
        sign, number, unit = "+=", raw["plus"], raw.get("unit")
    else:
        raise RecordError(field, shorten(dict(raw)), "either times, or plus with or without unit")
    value = None if isinstance(number, bool) else number_value(number)
    by = None if value is None else value.plain
    if by is None or isinstance(by, str) or not math.isfinite(by) or (sign == "*=" and by == 0):
        wanted = "a factor, finite and not 0" if sign == "*=" else "a finite number"
        raise RecordError(field, shorten(number), wanted)
    if unit is not None and type(unit) is not str:
        raise RecordError(f"{field}.unit", shorten(unit), "a unit as text")
    return Shift(sign, int(by) if float(by).is_integer() and abs(by) < 1e15 else by), unit


def settle_shift(
    machine: MachineNames, name: str, shift: Shift, unit: str | None, field: str
) -> tuple[Shift, Any]:
    """Return the shift in the unit stored, and what would then be known of the parameter.

    Raises
    ------
    RecordError
        If the parameter is no number, or its unit does not allow that.
    """
    kind = machine.parameters[name].kind
    if kind != "number":
        raise RecordError(
            field, f"{shift} for {kind}", "another value: only numbers have a factor or an offset"
        )
    number = number_value(shift.by)
    assert number is not None
    _, known = machine.settle(name, number, unit, field)
    own = known.unit or ""
    if shift.sign == "*=":
        if not counts_from_zero(own):
            raise RecordError(
                field, f"{shift} in {own}", "an offset: numbers in this unit do not count from zero"
            )
        return shift, known
    stated = known.bare if unit is None else unit
    if stated in (None, own):
        return shift, known
    try:
        rule = conversion(parse_unit(stated or ""), own)
        return Shift("+=", math.copysign(rule.stderr(abs(shift.by)), shift.by)), known
    except UnitError as problem:
        raise RecordError(field, shorten(stated), str(problem)) from None

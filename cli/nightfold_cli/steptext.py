"""Settings of steps, and what differs in them, in words."""

from __future__ import annotations

import math
from collections.abc import Callable
from datetime import datetime
from typing import TYPE_CHECKING, Any

from nightfold.concise import short
from nightfold_cli.scantext import counted
from nightfold_cli.settings import ENOUGH, setting
from nightfold_cli.sparklines import sparklines

if TYPE_CHECKING:
    from nightfold.ledger.comparing import SettingChange, Stated
    from nightfold.ledger.spreads import Spread
    from nightfold.ledger.timeline import StepSetting

_RAMP = 10


def value_text(part: StepSetting, *, unicode: bool) -> str:
    """Return a setting without its name: ``0.18 W``; a ramp as bars, first and last number, how many points."""
    ramp = part.ramp
    if ramp is None:
        return setting(part.value, part.unit, digits=ENOUGH)
    return ramp_text(ramp, unicode=unicode)


def ramp_text(ramp: tuple[float, ...], *, unicode: bool) -> str:
    """Return a list of numbers in a few words: ``▇▅▃▂▁ 6.4 → 0.16, 41 points``."""
    if not ramp:
        return "no points"
    if len(ramp) > 1 and len(set(ramp)) == 1:
        return f"{short(ramp[0])} at {len(ramp)} points"
    (line,) = sparklines([ramp], _RAMP, unicode=unicode)
    count = "1 point" if len(ramp) == 1 else f"{len(ramp)} points"
    ends = short(ramp[0]) if len(ramp) == 1 else f"{short(ramp[0])} {_arrow(unicode)} {short(ramp[-1])}"
    return f"{line} {ends}, {count}"


def spread_text(part: StepSetting, when: Callable[[datetime], str]) -> str:
    """Return how a setting differs between shots: ``1.1…1.3 mW, 2 edits 10-05``."""
    spread = part.spread
    if spread is None:
        return ""
    words = [f"{spread.values} {'ramps' if part.ramp is not None else 'values'}"]
    span = _span(part, spread)
    if span:
        words = [span] if spread.swept or spread.edits else [span, *words]
    if spread.swept:
        words.append("swept")
    if spread.edits:
        words.append(counted(spread.edits, "edit"))
    last = "" if spread.changed is None else f" {when(spread.changed)}"
    return ", ".join(words) + last


def _span(part: StepSetting, spread: Spread) -> str:
    """Return the range of a setting, or its two words."""
    if spread.words and part.ramp is None:
        return ", ".join(spread.words)
    if isinstance(part.value, bool):
        return "false, true"
    if isinstance(part.value, str) or spread.low is None or spread.high is None or spread.low == spread.high:
        return ""
    return f"{short(spread.low)}…{short(spread.high)} {part.unit}".rstrip()


def change_text(change: SettingChange, *, unicode: bool) -> str:
    """Return how a setting changed: ``0.22 → 0.34 W``; with ``+`` or ``-`` in front where only one has it."""
    if change.old is None or change.new is None:
        sign, stated = ("+", change.new) if change.old is None else ("-", change.old)
        return f"{sign} {stated_text(stated, unicode=unicode)}"
    return _changed(change.old, change.new, unicode=unicode)


def stated_text(stated: Stated | None, *, unicode: bool) -> str:
    """Return a setting as one shot has it."""
    from nightfold.ledger.timeline import ramp_of

    if stated is None:
        return setting(None)
    ramp = ramp_of(stated.value)
    return (
        setting(stated.value, stated.unit, digits=ENOUGH)
        if ramp is None
        else ramp_text(ramp, unicode=unicode)
    )


def _changed(old: Stated, new: Stated, *, unicode: bool) -> str:
    from nightfold.ledger.timeline import ramp_of

    one, other = ramp_of(old.value), ramp_of(new.value)
    if one and other:
        return _ramps(one, other, unicode=unicode)
    digits = next(
        n
        for n in range(ENOUGH, 18)
        if n == 17 or setting(old.value, old.unit, n) != setting(new.value, new.unit, n)
    )
    shared = old.unit == new.unit
    before = setting(old.value, None if shared else old.unit, max(digits, ENOUGH))
    return f"{before} {_arrow(unicode)} {setting(new.value, new.unit, digits)}"


def _ramps(old: tuple[float, ...], new: tuple[float, ...], *, unicode: bool) -> str:
    """Return how a list of numbers changed: both as bars of one scale, and where they differ most."""
    arrow = _arrow(unicode)
    before, after = sparklines([old, new], _RAMP, unicode=unicode)
    words = [f"{before} {arrow} {after}"]
    if len(old) != len(new):
        words.append(f"{len(old)} {arrow} {len(new)} points")
    else:
        apart = [_apart(a, b) for a, b in zip(old, new, strict=True)]
        most = max(range(len(apart)), key=lambda place: apart[place])
        count = sum(difference > 0 for difference in apart)
        if count == 1:
            words.append(f"point {most + 1} of {len(new)}: {short(old[most])} {arrow} {short(new[most])}")
        else:
            by = f" (point {most + 1}: {short(old[most])} {arrow} {short(new[most])})"
            words.append(f"{count} of {len(new)} points differ, by at most {short(apart[most])}{by}")
    if len(old) != len(new):
        words += [
            f"{name} {short(a)} {arrow} {short(b)}"
            for name, a, b in (("first", old[0], new[0]), ("last", old[-1], new[-1]))
            if _apart(a, b)
        ]
    return "; ".join(words)


def _apart(one: float, other: float) -> float:
    """Return by how much two numbers differ; endlessly where one is no number."""
    if (math.isnan(one) and math.isnan(other)) or one == other:
        return 0.0
    difference = abs(one - other)
    return math.inf if math.isnan(difference) else difference


def plain_value(value: Any) -> Any:
    """Return a setting for JSON: a list where it is a list of numbers."""
    from nightfold.ledger.timeline import ramp_of

    ramp = ramp_of(value)
    return value if ramp is None else list(ramp)


def _arrow(unicode: bool) -> str:
    return "→" if unicode else "->"

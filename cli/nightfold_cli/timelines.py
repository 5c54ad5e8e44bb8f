"""A shot of a sequence on the screen: a row a step, its bar in time, its settings below."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import TYPE_CHECKING, Any

from nightfold_cli.canvas import Line
from nightfold_cli.clock import UNKNOWN, Bar, bars, lasting, starts
from nightfold_cli.printable import cell_width, paragraph, printable, wrap
from nightfold_cli.scantext import counted
from nightfold_cli.settings import setting
from nightfold_cli.steptext import spread_text, value_text

if TYPE_CHECKING:
    from nightfold.ledger.timeline import StepSetting, Timeline, TimelineStep
    from nightfold_cli.render import Screen

DIFFERS = "~"
LITTLE, MANY = 24, 40  # settings at rest that are shown all the same, and moving ones that are not too many
RECENT = timedelta(days=7)
_GAP = "  "
_WIDEST_NAME = 24
_LEAST_NAME, _LEAST_BAR = 8, 12


@dataclass(frozen=True, slots=True)
class Choice:
    """Which settings a screen shows.

    Attributes
    ----------
    steps : list of list of StepSetting
        Those of each step.
    others : list of StepSetting
        Those of no step.
    hidden : list of StepSetting
    since : datetime
        From when on a change counted as recent.
    """

    steps: list[list[StepSetting]]
    others: list[StepSetting]
    hidden: list[StepSetting]
    since: datetime


def choose(timeline: Timeline, last: datetime, everything: bool) -> Choice:
    """Return which settings to show: all if asked for, else those that moved of late, and the rest if it is little.

    What a scan or a person changed within a week of the last shot moved of late; of more than 40 such settings only
    those changed last did. Up to 24 settings of steps that did not are shown all the same, and so are up to 24 of
    no step.
    """
    in_steps = [part for step in timeline.steps for part in step.settings]
    changes = sorted(
        part.spread.changed
        for part in in_steps + list(timeline.others)
        if part.spread and part.spread.changed
    )
    since = last - RECENT
    if len(changes) > MANY:
        since = max(since, changes[-MANY])
    all_in_steps = everything or _few(in_steps, since)
    all_others = everything or _few(timeline.others, since)
    steps = [
        [part for part in step.settings if all_in_steps or _moves(part, since)] for step in timeline.steps
    ]
    others = [part for part in timeline.others if all_others or _moves(part, since)]
    hidden = [] if all_in_steps else [part for part in in_steps if not _moves(part, since)]
    hidden += [] if all_others else [part for part in timeline.others if not _moves(part, since)]
    return Choice(steps, others, hidden, since)


def _moves(part: StepSetting, since: datetime) -> bool:
    """Return whether a setting was swept or edited of late, or changes by itself."""
    spread = part.spread
    return spread is not None and (spread.changed is None or spread.changed >= since)


def _few(parts: Sequence[StepSetting], since: datetime) -> bool:
    return sum(not _moves(part, since) for part in parts) <= LITTLE


def draw(screen: Screen, timeline: Timeline, choice: Choice, when: Callable[[datetime], str]) -> None:
    """Draw the steps of a shot, then the settings that belong to none."""
    if timeline.steps:
        screen.gap()
        screen.chart(_rows(timeline.steps, choice.steps, screen, when))
    if choice.others:
        screen.gap()
        screen.chart([[("settings of no step" if timeline.steps else "settings", "data")]])
        screen.chart(_settings_lines(choice.others, "  ", screen, when))


def remarks(timeline: Timeline, choice: Choice, since: str, width: int) -> Iterator[str]:
    """Yield what is to be said below: the scale, the sign, what is not known, what is not shown.

    Parameters
    ----------
    timeline, choice
    since : str
        When a change began to count as recent, as it is written.
    width : int
        Of the screen.
    """
    durations = [step.duration_s for step in timeline.steps]
    if timeline.steps:
        yield _scale(durations, _bar_width(timeline.steps, width))
    shown = [*choice.others, *(part for parts in choice.steps for part in parts)]
    if any(part.spread for part in shown) or any(_differs(step) for step in timeline.steps):
        yield f"{DIFFERS} differs between the shots of this version"
    unknown = sum(map(math.isnan, durations))
    if unknown:
        yield f"{counted(unknown, 'step')} without a duration in a unit of time: from there on the start is not known"
    if choice.hidden:
        yield _hidden(choice.hidden, since)


def _hidden(hidden: Sequence[StepSetting], since: str) -> str:
    """Return how many settings are not shown, and why."""
    resting = sum(part.spread is None for part in hidden)
    older = len(hidden) - resting
    words = []
    if resting:
        words.append(f"{counted(resting, 'setting')} the same at every shot")
    if older:
        words.append(f"{older if resting else counted(older, 'setting')} last changed before {since}")
    return f"not shown: {' and '.join(words)}; --all shows them"


def _scale(durations: Sequence[float], width: int) -> str:
    """Return what the length of a bar means."""
    scale = bars(durations, width)[1]
    if scale == "linear":
        return "bars to scale"
    known = [duration for duration in durations if duration > 0]
    ends = f"their length goes by the logarithm, {lasting(min(known))} to {lasting(max(known))}"
    if scale == "crowded":
        return f"too many steps to place the bars in time: {ends}"
    return f"bars not to scale: {ends}"


def _differs(step: TimelineStep) -> bool:
    """Return whether the duration of a step is not the same at every shot."""
    return step.duration is not None and step.duration.spread is not None


def duration_text(step: TimelineStep) -> str:
    """Return the duration of a step, as it was stated where that is no time."""
    if not math.isnan(step.duration_s):
        return lasting(step.duration_s)
    if step.duration is None or step.duration.value is None:
        return UNKNOWN
    return f"{setting(step.duration.value, step.duration.unit)} {UNKNOWN}"


def _bar_width(steps: Sequence[TimelineStep], width: int) -> int:
    """Return how many cells there are for the bars on a screen."""
    return max(1, width - len(_indent(steps)) - _name_width(steps, width) - len(_GAP))


def _indent(steps: Sequence[TimelineStep]) -> str:
    """Return the room before the names: that of starts, durations and the sign."""
    begun, unit = starts([step.duration_s for step in steps])
    first = max(len(f"start ({unit})"), *map(len, begun))
    second = max(len("duration"), *(cell_width(duration_text(step)) for step in steps))
    return " " * (first + second + 2 + 2 * len(_GAP))


def _name_width(steps: Sequence[TimelineStep], width: int) -> int:
    """Return the room for names: on a narrow screen less, so that there is some for the bars."""
    longest = max(cell_width(printable(step.name)) for step in steps)
    return min(_WIDEST_NAME, longest, max(_LEAST_NAME, width - len(_indent(steps)) - len(_GAP) - _LEAST_BAR))


def _rows(
    steps: Sequence[TimelineStep],
    chosen: Sequence[list[StepSetting]],
    screen: Screen,
    when: Callable[[datetime], str],
) -> Iterator[Line]:
    """Yield the head and the lines of every step."""
    durations = [step.duration_s for step in steps]
    begun, unit = starts(durations)
    placed, _ = bars(durations, _bar_width(steps, screen.width))
    first = max(len(f"start ({unit})"), *map(len, begun))
    indent, names = _indent(steps), _name_width(steps, screen.width)
    second = len(indent) - first - 2 - 2 * len(_GAP)
    head = f"{f'start ({unit})':<{first}}{_GAP}{'duration':>{second}}  {_GAP}step"
    yield [(head, "data")]
    for step, settings, start, bar in zip(steps, chosen, begun, placed, strict=True):
        sign = f" {DIFFERS}" if _differs(step) else "  "
        name, *more = wrap(printable(step.name), names)
        words = f"{start:<{first}}{_GAP}{_right(duration_text(step), second)}{sign}{_GAP}"
        yield [
            (words, "plain"),
            (name + " " * (names - cell_width(name)) + _GAP, "data"),
            (_bar(bar, screen.unicode), "curve"),
        ]
        for line in more:
            yield [(indent + line, "data")]
        duration = [step.duration] if step.duration is not None and step.duration.spread is not None else []
        yield from _settings_lines([*duration, *settings], indent, screen, when)


def _right(text: str, width: int) -> str:
    return " " * (width - cell_width(text)) + text


def _bar(bar: Bar, unicode: bool) -> str:
    """Return the bar of a step; a sign of its own where it has no length, or none that is known."""
    solid, mark = ("█", "│") if unicode else ("#", "|")
    return " " * bar.start + {"bar": solid, "mark": mark, "unknown": UNKNOWN}[bar.kind] * bar.length


def _settings_lines(
    parts: Sequence[StepSetting], indent: str, screen: Screen, when: Callable[[datetime], str]
) -> Iterator[Line]:
    """Yield the settings below a step: those that differ on lines of their own, the others one behind the other."""
    width = screen.width
    for part in parts:
        if part.spread is not None:
            text = f"{printable(part.name)} {_value(part, screen)}  ({printable(spread_text(part, when))})"
            for line in paragraph(text, width, f"{indent}{DIFFERS} ", indent + "    "):
                yield [(line, "plain")]
    resting = [f"{printable(part.name)} {_value(part, screen)}" for part in parts if part.spread is None]
    for line in flow(resting, width - len(indent) - 2):
        yield [(f"{indent}  {line}", "axis")]


def _value(part: StepSetting, screen: Screen) -> str:
    return printable(value_text(part, unicode=screen.unicode))


def flow(items: Sequence[str], width: int) -> list[str]:
    """Return items one behind the other in lines, parted by commas and broken between items where that is possible."""
    lines: list[str] = []
    for place, item in enumerate(items):
        text = item + ("," if place + 1 < len(items) else "")
        if lines and cell_width(lines[-1]) + 1 + cell_width(text) <= width:
            lines[-1] += " " + text
        else:
            lines += wrap(text, max(8, width))
    return lines


def tabulate(timeline: Timeline) -> list[list[Any]]:
    """Return a row a setting, for programs; a step that has none is a row too."""
    rows: list[list[Any]] = []
    for step in timeline.steps:
        clock = [step.name, _number(step.start_s), _number(step.duration_s)]
        own = [part for part in (step.duration, *step.settings) if part is not None]
        rows += [[*clock, *_cells(part)] for part in own] or [[*clock, *[""] * 8]]
    return rows + [["", "", "", *_cells(part)] for part in timeline.others]


def _cells(part: StepSetting) -> list[str]:
    spread = part.spread
    head = [part.name, setting(part.value), part.unit]
    if spread is None:
        return [*head, "1", "", "", "", "0"]
    ends = [setting(spread.low), setting(spread.high)]
    return [*head, str(spread.values), *ends, "swept" if spread.swept else "", str(spread.edits)]


def _number(seconds: float) -> str:
    return "" if math.isnan(seconds) else setting(seconds)

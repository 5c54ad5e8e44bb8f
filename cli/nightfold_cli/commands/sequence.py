"""``nightfold sequence``: the steps of a sequence in time, and what differs between its versions and shots."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Callable, Sequence
from datetime import datetime
from typing import TYPE_CHECKING, Any

from nightfold_cli import comparisons, timelines
from nightfold_cli.arguments import positive
from nightfold_cli.clock import lasting
from nightfold_cli.failures import UsageError
from nightfold_cli.known import check_machine
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.opening import local_times, opened, records
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted
from nightfold_cli.steptext import plain_value

if TYPE_CHECKING:
    from nightfold.ledger.sequences import ComparedShot, SequenceVersion, SequenceView
    from nightfold.ledger.timeline import StepSetting, Timeline
    from nightfold.store import Store

HELP = "show the steps of a sequence in time, or what differs"
EXAMPLES = (
    "nightfold sequence",
    "nightfold sequence evaporate-and-look",
    "nightfold sequence evaporate-and-look --against 1",
)
_ON_SCREEN = 8
_SETTING_HEADS = (
    *("step", "start_s", "duration_s", "setting", "value", "unit"),
    *("values", "low", "high", "swept", "edits"),
)
_CHANGE_HEADS = ("change", "old_step", "new_step", "setting", "old", "old_unit", "new", "new_unit")


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "name", metavar="NAME", nargs="?", help="show this sequence; without it they are listed"
    )
    parser.add_argument("--machine", metavar="NAME", help="of this machine")
    parser.add_argument(
        "--version", metavar="N", type=positive, help="the newest shot of this version (default: of all)"
    )
    parser.add_argument("--shot", metavar="UID", help="this shot")
    parser.add_argument(
        "--against", metavar="VERSION|UID", help="what differs from that version or shot, and nothing else"
    )
    parser.add_argument(
        "--all", action="store_true", help="all settings and versions, those long at rest too"
    )


def run(args: Namespace) -> int:
    """List the sequences, show one, or compare two shots of it."""
    screen = Screen.here(args.json)
    _check(args)
    with opened(args, screen) as store:
        args.machine = check_machine(store, args.machine, screen)
        times = local_times(store)
        if args.name is None:
            _list(screen, store, args.machine, times)
            return 0
        view = store.sequence(args.name, machine=args.machine)
        if args.against is None:
            _show(screen, view, args, times)
        else:
            _compare(screen, view, args, times)
    return 0


def _check(args: Namespace) -> None:
    """Refuse options that say nothing together."""
    given = [
        f"--{name}"
        for name in ("version", "shot", "against", "all")
        if getattr(args, name) not in (None, False)
    ]
    if args.name is None and given:
        raise UsageError(f"{given[0]} is for one sequence; found no NAME")
    if args.version is not None and args.shot is not None:
        raise UsageError("--version and --shot: found both, wanted one")
    if args.against is not None and args.all:
        raise UsageError("--all and --against: all that differs is shown anyway; leave out --all")


def _list(screen: Screen, store: Store, machine: str | None, times: LocalTimes) -> None:
    """List the sequences."""
    rows = records(store.sequences(machine))
    if screen.json:
        screen.answer({"sequences": rows})
        return
    moments = [times.local(row[end], row["machine"]) for row in rows for end in ("first", "last")]
    words = compact(moments)
    several = len(store.machines()) > 1
    columns = [
        Column("sequence", wraps=True),
        *([Column("machine")] if several or not screen.terminal else []),
        Column("versions", right=True),
        Column("shots", right=True),
        Column(heading(moments, "first"), plain_name="first"),
        Column("last"),
    ]
    screen.table(
        columns,
        [
            [
                row["sequence"],
                *([row["machine"]] if several or not screen.terminal else []),
                str(row["versions"]),
                str(row["shots"]),
                *_ends(words[2 * place : 2 * place + 2], moments[2 * place : 2 * place + 2]),
            ]
            for place, row in enumerate(rows)
        ],
        empty="no shots yet; 'nightfold take FILE…' takes some in",
    )
    if rows:
        screen.note(times.note(row["machine"] for row in rows))


def _ends(words: Sequence[str], moments: Sequence[datetime]) -> list[Cell]:
    return [Cell(word, at.isoformat(timespec="seconds")) for word, at in zip(words, moments, strict=True)]


def _show(screen: Screen, view: SequenceView, args: Namespace, times: LocalTimes) -> None:
    """Show one shot of a sequence in time."""
    timeline = view.timeline(args.version, shot=args.shot)
    version = view.version(timeline.version)
    if screen.json:
        screen.answer({"sequence": _entry(view, timeline)})
        return
    if not screen.terminal:
        screen.table(
            [Column(name) for name in _SETTING_HEADS], timelines.tabulate(timeline), empty="no settings"
        )
        screen.part()
        _versions(screen, view, view.versions, times)
        return
    when = _days(view, times)
    choice = timelines.choose(timeline, version.last, args.all)
    screen.heading(view.name, _summary(view, timeline))
    screen.text(f"values of shot {timeline.uid}, {times.full(timeline.started, view.machine)}")
    if not timeline.steps:
        screen.text("Its shots state no steps, but the name of the sequence: the parameters alone.")
    timelines.draw(screen, timeline, choice, when)
    screen.gap()
    since = f"{times.local(choice.since, view.machine):%Y-%m-%d %H:%M}"
    for remark in timelines.remarks(timeline, choice, since, screen.width):
        screen.note(remark)
    if len(view.versions) > 1:
        shown = view.versions if args.all else view.versions[-_ON_SCREEN:]
        _versions(screen, view, shown, times)
        if len(shown) < len(view.versions):
            screen.note(f"{len(view.versions) - len(shown)} earlier versions not shown; --all shows them")
        screen.note("--against N shows what differs from version N")
    screen.note(times.note([view.machine]))


def _summary(view: SequenceView, timeline: Timeline) -> str:
    """Return version, steps and duration of a shot in a few words."""
    words = [f"version {timeline.version} of {len(view.versions)}"]
    if timeline.steps:
        words += [counted(len(timeline.steps), "step"), _total(timeline)]
    words.append(counted(view.version(timeline.version).shots, "shot"))
    return ", ".join(words)


def _total(timeline: Timeline) -> str:
    """Return the total duration, with ``+ ?`` where a part of it is not known."""
    known = [step.duration_s for step in timeline.steps if step.duration_s == step.duration_s]
    return lasting(sum(known)) + ("" if len(known) == len(timeline.steps) else " + ?")


def _days(view: SequenceView, times: LocalTimes) -> Callable[[datetime], str]:
    """Return how days are written: without the year where the sequence has seen only one."""
    ends = [times.local(end, view.machine) for item in view.versions for end in (item.first, item.last)]
    pattern = "%m-%d" if len({end.year for end in ends}) == 1 else "%Y-%m-%d"
    return lambda at: f"{times.local(at, view.machine):{pattern}}"


def _versions(
    screen: Screen, view: SequenceView, shown: Sequence[SequenceVersion], times: LocalTimes
) -> None:
    """Write a line a version."""
    moments = [times.local(end, view.machine) for item in shown for end in (item.first, item.last)]
    words = compact(moments)
    screen.table(
        [
            Column("version", right=True),
            Column("steps", right=True),
            Column("shots", right=True),
            Column(heading(moments, "first"), plain_name="first"),
            Column("last"),
        ],
        [
            [
                str(item.number),
                "-" if item.steps is None else str(len(item.steps)),
                str(item.shots),
                *_ends(words[2 * place : 2 * place + 2], moments[2 * place : 2 * place + 2]),
            ]
            for place, item in enumerate(shown)
        ],
        empty="no versions",
    )


def _compare(screen: Screen, view: SequenceView, args: Namespace, times: LocalTimes) -> None:
    """Show what differs between two shots, and nothing else."""
    comparison = view.compare(_key(view, args.against), args.version if args.shot is None else args.shot)
    if screen.json:
        answer = {"name": view.name, "machine": view.machine, **comparisons.entry(comparison)}
        screen.answer({"comparison": answer})
        return
    if not screen.terminal:
        screen.table(
            [Column(name) for name in _CHANGE_HEADS],
            comparisons.tabulate(comparison),
            empty="nothing differs",
        )
        return
    screen.heading(view.name)
    screen.fields(
        (name, _side(side, view, times)) for name, side in (("old", comparison.old), ("new", comparison.new))
    )
    screen.gap()
    comparisons.draw(screen, comparison)
    if not comparison.steps and not comparison.others:
        screen.text("Nothing differs: the same steps with the same settings.")
    if comparison.renumbered:
        old, new_name = comparison.renumbered[0]
        count = len(comparison.renumbered)
        screen.note(
            f"{counted(count, 'step')} the same but for the number of the repetition, as {old}, now {new_name}"
        )


def _key(view: SequenceView, text: str) -> int | str:
    """Return what ``--against`` names: digits are a version where there is one of that number, else a shot."""
    if not (text.isascii() and text.isdigit()) or not 1 <= int(text) <= len(view.versions):
        if text.isdigit() and len(text) < 4:
            view.version(int(text))
        return text
    return int(text)


def _side(side: ComparedShot, view: SequenceView, times: LocalTimes) -> str:
    words = [f"version {side.version}", f"shot {side.uid}", times.full(side.started, view.machine)]
    if side.duration_s == side.duration_s:
        words.append(lasting(side.duration_s))
    return ", ".join(words)


def _entry(view: SequenceView, timeline: Timeline) -> dict[str, Any]:
    """Return a sequence and a shot of it for JSON."""
    return {
        "name": view.name,
        "machine": view.machine,
        "versions": [
            {
                "version": item.number,
                "steps": None if item.steps is None else [step.name for step in item.steps],
                "shots": item.shots,
                "first": item.first,
                "last": item.last,
            }
            for item in view.versions
        ],
        "version": timeline.version,
        "shot": timeline.uid,
        "started": timeline.started,
        "duration_s": timeline.duration_s,
        "steps": [
            {
                "name": step.name,
                "start_s": step.start_s,
                "duration_s": step.duration_s,
                "duration": None if step.duration is None else _setting(step.duration),
                "settings": [_setting(part) for part in step.settings],
            }
            for step in timeline.steps
        ],
        "others": [_setting(part) for part in timeline.others],
    }


def _setting(part: StepSetting) -> dict[str, Any]:
    spread = part.spread
    return {
        "name": part.name,
        "value": plain_value(part.value),
        "unit": part.unit or None,
        "values": 1 if spread is None else spread.values,
        "low": None if spread is None else spread.low,
        "high": None if spread is None else spread.high,
        "swept": spread is not None and spread.swept,
        "edits": 0 if spread is None else spread.edits,
        "changed": None if spread is None else spread.changed,
    }

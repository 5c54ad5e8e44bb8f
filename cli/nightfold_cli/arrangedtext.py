"""What ``join`` and ``split`` share: their options, undoing, and the list of what was arranged by hand."""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from nightfold_cli.arguments import add_by, by_whom, positive
from nightfold_cli.failures import UsageError
from nightfold_cli.layout import Cell, Column
from nightfold_cli.localtimes import LocalTimes, compact, heading
from nightfold_cli.naming import shared_names
from nightfold_cli.opening import local_times, opened, records
from nightfold_cli.render import Screen
from nightfold_cli.scantext import counted

if TYPE_CHECKING:
    from nightfold.scans.arrangements import Arrangement
    from nightfold.store import Store

Names = Mapping[tuple[str | None, str, str], str]


def add_shared(parser: ArgumentParser) -> None:
    """Declare the options of both commands."""
    parser.add_argument("--reason", metavar="TEXT", help="why")
    add_by(parser)
    instead = parser.add_mutually_exclusive_group()
    instead.add_argument(
        "--undo", metavar="N", type=positive, help="take back the join or split of this number, instead"
    )
    instead.add_argument("--list", action="store_true", help="list what was joined and split, instead")


def answer_shared(args: Namespace, screen: Screen, keys: Sequence[str]) -> bool:
    """Do what ``--undo`` or ``--list`` asks for; False if neither was given."""
    if not args.list and args.undo is None:
        return False
    if keys:
        raise UsageError(f"found {', '.join(keys)} beside --{'list' if args.list else 'undo'}, wanted either")
    with opened(args, screen) as store:
        if args.list:
            _list(store, screen)
        else:
            _undo(store, screen, args)
    return True


def _undo(store: Store, screen: Screen, args: Namespace) -> None:
    """Take an arrangement back."""
    undone = store.undo_arrangement(args.undo, by=by_whom(args))
    if screen.json:
        screen.answer({"undone": entry(undone, shared_names(store))})
        return
    back = " and ".join(_named(undone, undone.before, shared_names(store)))
    screen.text(f"{undone.kind} {undone.number} undone: {counted(undone.shots, 'shot')} back in {back}")


def _list(store: Store, screen: Screen) -> None:
    """List the joins and splits, the oldest first."""
    names, times = shared_names(store), local_times(store)
    found = _read(store)
    if screen.json:
        screen.answer({"arrangements": [entry(item, names) for item in found]})
        return
    moments = [times.local(item.at, item.machine) for item in found]
    columns = [
        Column("number", right=True),
        Column(heading(moments), plain_name="at"),
        Column("what", wraps=True),
        Column("shots", right=True),
        Column("why", wraps=True),
        Column("by", spare=1),
        Column("undone", wraps=True),
    ]
    rows = [
        [
            str(item.number),
            Cell(when, at.isoformat(timespec="seconds")),
            what_was_done(item, names),
            str(item.shots),
            item.reason or "",
            item.by or "",
            _when_undone(item, times),
        ]
        for when, at, item in zip(compact(moments), moments, found, strict=True)
    ]
    screen.table(columns, rows, empty="nothing was joined or split by hand")
    if rows:
        screen.note(times.note(item.machine for item in found))


def _read(store: Store) -> list[Arrangement]:
    """Return all joins and splits."""
    from nightfold.scans.arrangements import Arrangement

    rows = records(store.arrangements())
    return [
        Arrangement(**{**row, "undone": row["undone"] if row["undone"] == row["undone"] else None})
        for row in rows
    ]


def _when_undone(item: Arrangement, times: LocalTimes) -> Cell | str:
    if item.undone is None:
        return ""
    at = times.local(item.undone, item.machine)
    by = f" by {item.undone_by}" if item.undone_by else ""
    return Cell(f"{at:%m-%d %H:%M}{by}", at.isoformat(timespec="seconds") + by)


def what_was_done(item: Arrangement, names: Names) -> str:
    """Return an arrangement in a few words: ``joined loss#1 and loss#3 into loss#1``."""
    before, after = (" and ".join(_named(item, keys, names)) for keys in (item.before, item.after))
    verb = "joined" if item.kind == "join" else "split"
    return f"{verb} {before}" + (f" into {after}" if after else "")


def in_full(item: Arrangement, names: Names, times: LocalTimes) -> str:
    """Return an arrangement with who did it when and why, and how to take it back."""
    by = f" by {item.by}" if item.by else ""
    why = f": {item.reason}" if item.reason else ""
    said = f"{what_was_done(item, names)}, {times.full(item.at, item.machine)}{by}{why}"
    return f"{said}; 'nightfold {item.kind} --undo {item.number}' takes it back"


def entry(item: Arrangement, names: Names) -> dict[str, Any]:
    """Return an arrangement for JSON."""
    return asdict(item) | {
        "before": _named(item, item.before, names),
        "after": _named(item, item.after, names),
    }


def _named(item: Arrangement, keys: Sequence[str], names: Names) -> list[str]:
    """Return how the scans are called: by id where a label is shared."""
    return [names.get((item.machine, item.sequence, key), key) for key in keys]

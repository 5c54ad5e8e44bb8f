"""``nightfold take FILE…``: take shots, or readings of sensors, from files into the store."""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from nightfold_cli.failures import REFUSED, UsageError, explain
from nightfold_cli.layout import Column
from nightfold_cli.namehint import name_hint, sensors_hint
from nightfold_cli.opening import opened
from nightfold_cli.progress import Progress
from nightfold_cli.refusals import summarise
from nightfold_cli.render import Screen
from nightfold_cli.zonehint import zone_hint

if TYPE_CHECKING:
    from nightfold.intake.csvcolumns import CsvColumns
    from nightfold.ledger.outcome import Intake
    from nightfold.store import Store

HELP = "take shots, or sensors, from files into the store"
EXAMPLES = (
    "nightfold take shots/*.jsonl",
    "nightfold take monday.jsonl --card heron.toml --new",
    "nightfold take decay.csv --machine heron --sequence hold --swept hold_time \\",
    "      --started-at 2026-10-05T21:14:00+02:00 --cycle 18",
    "nightfold take --sensors room.jsonl vacuum.csv --machine heron",
)
_SHOWN = 20
_LISTED = 50
_TABLE_OPTIONS = (
    ("--machine", "NAME", "machine of all rows"),
    ("--sequence", "NAME", "sequence of all rows"),
    ("--scan", "LABEL", "label of the scan that the rows are"),
    ("--parameters", "NAME,…", "columns that are settings; 'rest' for all not spoken for"),
    ("--observables", "NAME,…", "columns that were measured; 'rest' for all not spoken for"),
    ("--swept", "NAME,…", "settings varied on purpose"),
    ("--started", "COLUMN", "column with the time (default: started; at for sensors)"),
    ("--uid", "COLUMN", "column with the unique name of the shot (default: uid)"),
    ("--started-at", "TIME", "time of the first row, with offset, where no column tells it"),
    ("--columns", "NAME,…", "names of all columns, for a table without a head line"),
    ("--delimiter", "SIGN", "what parts the columns: , ; tab or space (default: found out)"),
)
_SHOTS_ONLY = (
    "sequence", "scan", "parameters", "observables", "swept", "uid", "started_at", "columns", "cycle",
)  # fmt: skip
_DELIMITERS = {"tab": "\t", "\\t": "\t", "space": " "}


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "files", metavar="FILE", nargs="+", help="JSON lines (.jsonl, .json) or a table (.csv …)"
    )
    parser.add_argument("--card", metavar="CARD", type=Path, help="use this machine card from now on")
    parser.add_argument("--new", action="store_true", help="make the store if it is not there yet")
    parser.add_argument(
        "--sensors", action="store_true", help="the files hold readings of sensors, which belong to no shot"
    )
    table = parser.add_argument_group(
        "tables (.csv, .tsv, .dat, .txt), whose columns say less than a record does"
    )
    for name, metavar, help_line in _TABLE_OPTIONS:
        table.add_argument(name, metavar=metavar, help=help_line)
    table.add_argument("--cycle", metavar="S", type=float, help="seconds from row to row (default: 10)")


def run(args: Namespace) -> int:
    """Take all files; one that cannot be read does not keep the others out."""
    from nightfold.card import read_card

    screen = Screen.here(args.json)
    total = _Total()
    if args.sensors and (
        wrong := next((name for name in _SHOTS_ONLY if getattr(args, name) is not None), "")
    ):
        raise UsageError(
            f"--{wrong.replace('_', '-')} is for shots; --sensors takes readings that belong to none"
        )
    if args.card:
        read_card(args.card)
    with opened(args, screen, create=args.new) as store:
        if args.card:
            store.use_card(args.card)
        machines = store.machines()
        for name in args.files:
            outcome = _take(store, name, args)
            if isinstance(outcome, Unreadable):
                total.add_unreadable(outcome)
            else:
                total.add(name, outcome)
        hint = name_hint(machines, store.machines())
        if not hint and args.sensors:
            hint = sensors_hint(machines, store.machines())
        elif not hint:
            hint = zone_hint(store, [name for name, *_ in total.rows])
    if screen.json:
        screen.answer({**total.counts(), "refused": total.refused})
    else:
        total.show(screen)
        if args.sensors and total.rows:
            screen.note("new and known are readings, refused are lines")
    _list_refused(screen, total, readings=args.sensors)
    if hint:
        screen.say(hint)
    return total.code


@dataclass(frozen=True, slots=True)
class Unreadable:
    """A file of which nothing could be taken, why, and the exit code of that."""

    name: str
    reason: str
    code: int


class _Total:
    """What came of all files together."""

    def __init__(self) -> None:
        self.rows: list[tuple[str, int, int, int, int]] = []
        self.refused: list[dict[str, Any]] = []
        self.code = 0

    def add_unreadable(self, file: Unreadable) -> None:
        """Count a file of which nothing could be taken."""
        self.refused.append({"source": file.name, "line": None, "reason": file.reason})
        self.code = max(self.code, file.code)

    def add(self, name: str, intake: Intake) -> None:
        """Count what came of one file."""
        self.rows.append((name, intake.new, intake.known, intake.amended, len(intake.refused)))
        self.refused += [
            {"source": item.source, "line": item.line, "reason": item.reason} for item in intake.refused
        ]
        if intake.refused:
            self.code = REFUSED

    def counts(self) -> dict[str, int]:
        """Return the sums over all files."""
        _, new, known, amended, _ = zip(*self.rows, strict=True) if self.rows else ((),) * 5
        return {"new": sum(new), "known": sum(known), "amended": sum(amended)}

    def show(self, screen: Screen) -> None:
        """Show a line a file, and the sum where there are several."""
        rows = [[name, *map(str, counts)] for name, *counts in self.rows]
        if screen.terminal and len(rows) > 1:
            sums = self.counts()
            refused = str(sum(row[4] for row in self.rows))
            rows = [*rows[:_SHOWN], *([["…", "", "", "", ""]] if len(rows) > _SHOWN else [])]
            rows.append(["all files", *(str(sums[key]) for key in ("new", "known", "amended")), refused])
        columns = [Column("file", wraps=True)]
        columns += [Column(name, right=True) for name in ("new", "known", "amended", "refused")]
        screen.table(columns, rows, empty="no file could be read")


def _take(store: Store, name: str, args: Namespace) -> Intake | Unreadable:
    """Take one file, or return why it could not be read; a store that fails is no fault of the file."""
    from nightfold.errors import NightfoldError, StoreError

    path = Path(name)
    reached = _Reached()
    try:
        with Progress(
            f"taking {path.name}", path.stat().st_size if path.is_file() else 0, sys.stderr
        ) as progress:
            if args.sensors:
                return store.take_sensor_file(
                    name,
                    machine=args.machine,
                    at=args.started or "at",
                    delimiter=_DELIMITERS.get(args.delimiter, args.delimiter),
                    progress=reached.then(progress),
                )
            return store.take_file(name, columns=_columns(args), progress=reached.then(progress))
    except KeyboardInterrupt as stop:
        raise KeyboardInterrupt(_how_far(path, reached.byte)) from stop
    except (NightfoldError, OSError) as error:
        if args.debug or isinstance(error, StoreError):
            raise
        reason, code = explain(error)
        return Unreadable(name, reason if path.name in reason else f"{name}: {reason}", code)


class _Reached:
    """Remembers how far a file was taken."""

    def __init__(self) -> None:
        self.byte: int | None = None

    def then(self, progress: Progress) -> Callable[[int], None]:
        """Return a function that remembers the offset of the last line taken, then reports it."""

        def report(byte: int) -> None:
            self.byte = byte
            progress(byte)

        return report


def _how_far(path: Path, byte: int | None) -> str:
    """Return how many lines of a file were taken before an interruption, and how to go on."""
    count = 0
    if byte is not None:
        with path.open("rb") as stream:
            for line in stream:
                count += bool(line.strip())
                byte -= len(line)
                if byte < 0:
                    break
    done = {0: "nothing", 1: "the first line"}.get(count, f"the first {count} lines")
    return f"{done} of {path} taken and safe in the store; taking the file again goes on there"


def _columns(args: Namespace) -> CsvColumns:
    """Return what the options say about the columns of a table."""
    from nightfold.intake.csvfile import CsvColumns

    named = {
        "machine": args.machine,
        "sequence": args.sequence,
        "scan": args.scan,
        "started": args.started,
        "uid": args.uid,
        "started_at": args.started_at,
        "cycle_s": args.cycle,
        "delimiter": _DELIMITERS.get(args.delimiter, args.delimiter),
        "parameters": _names(args.parameters),
        "observables": _names(args.observables),
        "swept": _names(args.swept),
        "names": _names(args.columns),
    }
    return CsvColumns(**{key: value for key, value in named.items() if value is not None})


def _list_refused(screen: Screen, total: _Total, *, readings: bool) -> None:
    """List what was refused, on stderr; as JSON it is in the answer."""
    if screen.json or not total.refused:
        return
    lines = summarise(total.refused)
    most = _LISTED if screen.err.isatty() else len(lines)
    for line in lines[:most]:
        screen.say(line)
    if len(lines) > most:
        screen.say(f"and {len(lines) - most} more reasons; 2> FILE lists them all")
    if any(item["line"] for item in total.refused):
        kept = f"{sum(total.counts().values())}{' readings' if readings else ''} kept"
        refused = sum(row[4] for row in total.rows)
        screen.say(f"{refused} refused, {kept}; mend the refused ones and take the file again")


def _names(text: str | None) -> tuple[str, ...] | Literal["rest"] | None:
    """Return the names of a list with commas; ``rest`` stands for itself."""
    if text is None:
        return None
    if text == "rest":
        return "rest"
    return tuple(name.strip() for name in text.split(",") if name.strip())

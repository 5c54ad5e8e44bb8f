"""``nightfold take FILE…``: take shots from files into the store."""

from __future__ import annotations

import sys
from argparse import ArgumentParser, Namespace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from nightfold_cli.failures import NOT_FOUND, REFUSED, explain
from nightfold_cli.layout import Column
from nightfold_cli.opening import opened
from nightfold_cli.progress import Progress
from nightfold_cli.render import Screen

if TYPE_CHECKING:
    from nightfold.intake.csvcolumns import CsvColumns
    from nightfold.ledger.outcome import Intake
    from nightfold.store import Store

HELP = "take shots from files into the store"
EXAMPLES = (
    "nightfold take shots/*.jsonl",
    "nightfold take monday.jsonl --card heron.toml --new",
    "nightfold take decay.csv --machine heron --sequence hold --swept hold_time \\",
    "      --started-at 2026-10-05T21:14:00+02:00 --cycle 18",
)
_SHOWN = 20
_TABLE_OPTIONS = (
    ("--machine", "NAME", "machine of all rows"),
    ("--sequence", "NAME", "sequence of all rows"),
    ("--scan", "LABEL", "label of the scan that the rows are"),
    ("--parameters", "NAME,…", "columns that are settings; 'rest' for all not spoken for"),
    ("--observables", "NAME,…", "columns that were measured; 'rest' for all not spoken for"),
    ("--swept", "NAME,…", "settings varied on purpose"),
    ("--started", "COLUMN", "column with the time of the shot (default: started)"),
    ("--uid", "COLUMN", "column with the unique name of the shot (default: uid)"),
    ("--started-at", "TIME", "time of the first row, with offset, where no column tells it"),
    ("--columns", "NAME,…", "names of all columns, for a table without a head line"),
    ("--delimiter", "SIGN", "what parts the columns: , ; tab or space (default: found out)"),
)
_DELIMITERS = {"tab": "\t", "\\t": "\t", "space": " "}


def add_arguments(parser: ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument(
        "files", metavar="FILE", nargs="+", help="JSON lines (.jsonl, .json) or a table (.csv …)"
    )
    parser.add_argument("--card", metavar="CARD", type=Path, help="use this machine card from now on")
    parser.add_argument("--new", action="store_true", help="make the store if it is not there yet")
    table = parser.add_argument_group(
        "tables (.csv, .tsv, .dat, .txt), whose columns say less than a record does"
    )
    for name, metavar, help_line in _TABLE_OPTIONS:
        table.add_argument(name, metavar=metavar, help=help_line)
    table.add_argument("--cycle", metavar="S", type=float, help="seconds from row to row (default: 10)")


def run(args: Namespace) -> int:
    """Take all files; one that cannot be read does not keep the others out."""
    screen = Screen.here(args.json)
    total = _Total()
    with opened(args, screen, create=args.new) as store:
        if args.card:
            store.use_card(args.card)
        for name in args.files:
            total.add(name, *_take(store, name, args))
    if screen.json:
        screen.answer({**total.counts(), "refused": total.refused})
    else:
        total.show(screen)
    _list_refused(screen, total)
    return total.code


class _Total:
    """What came of all files together."""

    def __init__(self) -> None:
        self.rows: list[tuple[str, int, int, int, int]] = []
        self.refused: list[dict[str, Any]] = []
        self.code = 0

    def add(self, name: str, intake: Intake | None, failure: tuple[str, int] | None) -> None:
        """Count what came of one file."""
        if failure is not None:
            self.refused.append({"source": name, "line": None, "reason": failure[0]})
            self.code = max(self.code, REFUSED if failure[1] != NOT_FOUND else NOT_FOUND)
            return
        assert intake is not None
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


def _take(store: Store, name: str, args: Namespace) -> tuple[Intake | None, tuple[str, int] | None]:
    """Take one file; return what was taken, or why it could not be read and the exit code of that."""
    try:
        size = Path(name).stat().st_size
        with Progress(f"taking {Path(name).name}", size, sys.stderr) as progress:
            return store.take_file(name, columns=_columns(args), progress=progress), None
    except (OSError, ValueError) as error:
        message, code = explain(error)
        if args.debug or code not in (NOT_FOUND, REFUSED):
            raise
        return None, (message, code)


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


def _list_refused(screen: Screen, total: _Total) -> None:
    """List what was refused, on stderr; as JSON it is in the answer."""
    if screen.json or not total.refused:
        return
    for item in total.refused:
        place = f"{item['source']}:{item['line']}" if item["line"] else item["source"]
        screen.say(f"refused {place}: {item['reason']}")
    kept = sum(total.counts().values())
    screen.say(f"{len(total.refused)} refused, {kept} kept; mend the refused ones and take the file again")


def _names(text: str | None) -> tuple[str, ...] | Literal["rest"] | None:
    """Return the names of a list with commas; ``rest`` stands for itself."""
    if text is None:
        return None
    if text == "rest":
        return "rest"
    return tuple(name.strip() for name in text.split(",") if name.strip())
